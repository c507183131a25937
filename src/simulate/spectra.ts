/** The light that each fibre brings to each column, electrons, before it is spread over pixels. */

import { openStream } from "../random/streams.js";
import { normalCumulative } from "./gaussian.js";
import { LAMP_LINES, NIGHT_SKY_LINES } from "./lines.js";
import { columnOf, type Optics } from "./optics.js";
import type { Scene, SceneExposure } from "./scene.js";
import { columnArgument } from "./series.js";

export interface TrueLine {
  /** From 0. */
  fibre: number;
  /** Column of its middle, from 0; Å. */
  x: number;
  wavelength: number;
  /** All of it. */
  electrons: number;
  kind: "arc" | "sky" | "emission";
}

export interface TrueSpectra {
  /** nFibre × nx, e⁻ per column over the whole profile, before the pixels' response; 0 for a dead fibre. */
  flux: Float64Array;
  lines: TrueLine[];
  /** nFibre × nx, relative. */
  throughput: Float64Array;
}

/** What every spectrum is made from. */
interface Bench {
  scene: Scene;
  exposure: SceneExposure;
  optics: Optics;
  throughput: Float64Array;
  flux: Float64Array;
  lines: TrueLine[];
}

export function makeSpectra(scene: Scene, exposure: SceneExposure, optics: Optics): TrueSpectra {
  const flux = new Float64Array(optics.nFibre * optics.nx);
  const bench: Bench = { scene, exposure, optics, throughput: throughputs(scene, optics), flux, lines: [] };
  if (exposure.kind === "fibre-flat") addFlatLamp(bench);
  if (exposure.kind === "twilight") addTwilight(bench);
  if (exposure.kind === "arc") addArc(bench);
  if (exposure.kind === "science") addScience(bench);
  return { flux, lines: bench.lines, throughput: bench.throughput };
}

function throughputs({ light, seed }: Scene, optics: Optics): Float64Array {
  const own = openStream(seed, "throughput");
  const out = new Float64Array(optics.nFibre * optics.nx);
  for (let k = 0; k < optics.nFibre; k++) {
    const level = Math.max(0.2, 1 + light.throughput_rms * own.normal());
    const slope = light.throughput_slope * (0.5 + 0.5 * own.uniform());
    const hump = light.throughput_slope * own.uniform();
    for (let x = 0; x < optics.nx; x++) {
      const t = columnArgument(x, optics.nx);
      out[k * optics.nx + x] = level * (1 + slope * t - hump * t * t) * (optics.lit[k] ? 1 : 0);
    }
  }
  return out;
}

/** Calls `level(k, x)` for every column of every lit fibre and adds it, times throughput and brightness. */
function addContinuum(bench: Bench, level: (fibre: number, x: number) => number): void {
  const { optics, throughput, flux, exposure } = bench;
  for (let k = 0; k < optics.nFibre; k++) {
    if (!optics.lit[k]) continue;
    for (let x = 0; x < optics.nx; x++) {
      const i = k * optics.nx + x;
      flux[i] += level(k, x) * throughput[i] * exposure.brightness;
    }
  }
}

/** One unresolved line: a Gaussian along x, integrated over the columns. */
function addLine(bench: Bench, fibre: number, wavelength: number, bareElectrons: number, kind: TrueLine["kind"]): void {
  const { optics, scene, flux, throughput, exposure } = bench;
  const sigma = scene.wavelength.fwhm / (2 * Math.sqrt(2 * Math.LN2));
  const x = columnOf(optics, fibre, wavelength, 6 * sigma);
  if (Number.isNaN(x) || !optics.lit[fibre]) return;
  const nearest = Math.min(optics.nx - 1, Math.max(0, Math.round(x)));
  const electrons = bareElectrons * throughput[fibre * optics.nx + nearest] * exposure.brightness;
  bench.lines.push({ fibre, x, wavelength, electrons, kind });
  const from = Math.max(0, Math.floor(x - 9 * sigma));
  const to = Math.min(optics.nx - 1, Math.ceil(x + 9 * sigma));
  let below = normalCumulative((from - 0.5 - x) / sigma);
  for (let column = from; column <= to; column++) {
    const above = normalCumulative((column + 0.5 - x) / sigma);
    flux[fibre * optics.nx + column] += electrons * (above - below);
    below = above;
  }
}

/** A lamp without lines, brighter towards long wavelengths. */
function addFlatLamp(bench: Bench): void {
  const { scene, exposure, optics } = bench;
  const [first, last] = scene.wavelength.range;
  const level = scene.light.flat_rate * exposure.seconds;
  addContinuum(bench, (k, x) => {
    const u = (optics.wave[k * optics.nx + x] - (first + last) / 2) / Math.abs(last - first);
    return level * (0.95 + 0.3 * u - 0.2 * u * u);
  });
}

function addTwilight(bench: Bench): void {
  const { scene, exposure } = bench;
  const spectrum = absorptionSpectrum(bench, "twilight", 40, 0.5);
  addContinuum(bench, (k, x) => scene.light.twilight_rate * exposure.seconds * spectrum(k, x));
}

function addArc(bench: Bench): void {
  const { scene, exposure, optics } = bench;
  const strengths = openStream(scene.seed, "arc");
  for (const lamp of ["Ne", "Ar", "Hg", "Cu"] as const) {
    for (const wavelength of LAMP_LINES[lamp]) {
      const strength = 10 ** (-1.5 * strengths.uniform());
      if (!scene.wavelength.lamps.includes(lamp)) continue;
      const electrons = strength * scene.light.arc_rate * exposure.seconds;
      for (let k = 0; k < optics.nFibre; k++) addLine(bench, k, wavelength, electrons, "arc");
    }
  }
}

function addScience(bench: Bench): void {
  const { scene, exposure, optics } = bench;
  const share = exposure.seconds / scene.science.seconds;
  const levels = targetLevels(scene, optics);
  for (let k = 0; k < optics.nFibre; k++) if (optics.lit[k]) addTarget(bench, k, levels[k] * share, share);
  addContinuum(bench, () => scene.science.sky_level * share);
  if (scene.science.sky_line === 0) return;
  for (const [wavelength, strength] of NIGHT_SKY_LINES) {
    for (let k = 0; k < optics.nFibre; k++)
      addLine(bench, k, wavelength, scene.science.sky_line * strength * share, "sky");
  }
}

/** e⁻ per column of each slit position's target: given, or evenly spread in the logarithm and shuffled (Fisher–Yates),
 * so that faint fibres stand beside bright ones. */
function targetLevels({ science, seed }: Scene, optics: Optics): Float64Array {
  const out = new Float64Array(optics.nFibre);
  const targets = [...out.keys()].filter((k) => optics.lit[k] && !optics.sky[k]);
  if (science.levels) {
    const given = science.levels;
    for (const k of targets) out[k] = given[k % given.length];
    return out;
  }
  const shuffle = openStream(seed, "targets");
  for (let i = targets.length - 1; i > 0; i--) {
    const j = Math.floor(shuffle.uniform() * (i + 1));
    [targets[i], targets[j]] = [targets[j], targets[i]];
  }
  const ratio = science.brightest / science.faintest;
  for (const [rank, k] of targets.entries()) {
    out[k] = science.faintest * ratio ** (targets.length > 1 ? rank / (targets.length - 1) : 1);
  }
  return out;
}

function addTarget(bench: Bench, fibre: number, level: number, share: number): void {
  if (level === 0) return;
  const { science, seed } = bench.scene;
  const dice = openStream(seed, "target", fibre);
  const tilt = science.colour * (2 * dice.uniform() - 1);
  const bend = 0.5 * science.colour * (2 * dice.uniform() - 1);
  const spectrum = absorptionSpectrum(bench, `absorption ${fibre}`, science.absorption_lines, science.absorption_depth);
  const { optics, throughput, flux, exposure } = bench;
  for (let x = 0; x < optics.nx; x++) {
    const t = columnArgument(x, optics.nx);
    const i = fibre * optics.nx + x;
    flux[i] += level * (1 + tilt * t + bend * t * t) * spectrum(fibre, x) * throughput[i] * exposure.brightness;
  }
  addEmission(bench, fibre, share);
}

/** One to five lines, whatever the target's continuum: bright lines on faint fibres are what rejection must not eat. */
function addEmission(bench: Bench, fibre: number, share: number): void {
  const { science, seed, wavelength } = bench.scene;
  const dice = openStream(seed, "emission", fibre);
  if (dice.uniform() >= science.emission_share) return;
  const nLine = 1 + Math.floor(5 * dice.uniform());
  const [first, last] = wavelength.range;
  for (let i = 0; i < nLine; i++) {
    const where = first + (last - first) * (0.03 + 0.94 * dice.uniform());
    addLine(bench, fibre, where, science.emission_brightest * share * 10 ** (-3 * dice.uniform()), "emission");
  }
}

/** A transmission spectrum with Gaussian lines between 1 and 4 line widths of the instrument wide; same wavelengths in
 * every fibre that asks with the same name. */
function absorptionSpectrum(
  bench: Bench,
  name: string,
  nLine: number,
  deepest: number,
): (fibre: number, x: number) => number {
  const { scene, optics } = bench;
  const dice = openStream(scene.seed, name);
  const [first, last] = scene.wavelength.range;
  const unit = (scene.wavelength.fwhm * Math.abs(last - first)) / (optics.nx - 1) / 2.355;
  const lines = Array.from({ length: nLine }, () => ({
    middle: first + (last - first) * dice.uniform(),
    sigma: unit * (1 + 3 * dice.uniform()),
    depth: deepest * (0.1 + 0.9 * dice.uniform()),
  }));
  return (fibre, x) => {
    const wavelength = optics.wave[fibre * optics.nx + x];
    let passed = 1;
    for (const { middle, sigma, depth } of lines) {
      const u = (wavelength - middle) / sigma;
      if (u > -6 && u < 6) passed *= 1 - depth * Math.exp(-0.5 * u * u);
    }
    return passed;
  };
}
