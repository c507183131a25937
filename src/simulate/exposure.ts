/** One exposure of a scene: the raw image and the truth behind it. */
import type { Card } from "../fits/header.js";
import { cosmicRayImage } from "./cosmicRays.js";
import {
  biasLevel,
  buildDetector,
  countElectrons,
  type Detector,
  expectedElectrons,
  type RawImage,
  readOut,
} from "./detector.js";
import { exposureCards } from "./headers.js";
import { scatteredLight, spreadFibres } from "./image.js";
import { buildOptics, type Optics } from "./optics.js";
import { profileWeights } from "./profile.js";
import type { ExposureKind, Scene, SceneExposure } from "./scene.js";
import { SceneError } from "./sceneMessages.js";
import { columnArgument } from "./series.js";
import { makeSpectra, type TrueLine } from "./spectra.js";

/** Images of the detector are ny × nx with dispersion along x; spectra are nFibre × nx; pixels and fibres count from 0. */
export interface Truth {
  nx: number;
  ny: number;
  nFibre: number;
  /** nFibre, from 1. */
  block: Int32Array;
  lit: boolean[];
  sky: boolean[];
  /** e⁻ per column over the whole profile, wings included, before the pixels' response; 0 for a dead fibre. */
  flux: Float64Array;
  /** y of the centroid of the whole profile, this exposure's shift included. */
  trace: Float64Array;
  /** σ of the profile's core, pixels. */
  sigma: Float64Array;
  /** Å. */
  wave: Float64Array;
  /** Relative. */
  throughput: Float64Array;
  /** nFibre × traceTerms and nFibre × sigmaTerms: the same tramlines and widths as exact Legendre coefficients. */
  traceLegendre: Float64Array;
  traceTerms: number;
  sigmaLegendre: Float64Array;
  sigmaTerms: number;
  /** Pixels; per pixel from the middle row; pixels along dispersion. */
  shift: number;
  stretch: number;
  dispersionShift: number;
  /** e⁻ per pixel. */
  scattered: Float64Array;
  cosmicRays: Float32Array;
  /** 1 where the converter clipped. */
  saturated: Uint8Array;
  /** 1 in bad columns. */
  bad: Uint8Array;
  response: Float32Array;
  lines: TrueLine[];
  /** Mean e⁻ in every pixel, cosmic rays and read noise aside: response × (fibres + scattered) + dark. */
  expectedElectrons(): Float64Array;
  /** The frame after a perfect detector correction, e⁻: [gain · (ADU − bias) − dark] / response, noise as it fell. */
  correctedElectrons(): Float32Array;
  /** Exact weights of the pixels y0 … y0 + n − 1 under fibre k's profile in column x; all pixels together have sum 1. */
  truthProfile(k: number, x: number, y0: number, n: number): Float64Array;
}

export interface SimulatedExposure {
  name: string;
  kind: ExposureKind;
  /** The file's image, overscan included. */
  raw: RawImage;
  /** What the observer's header says, without the structural cards. */
  cards: Card[];
  truth: Truth;
}

/** Simulates one exposure: one of the scene's by its name, or any other description of one.
 * The same scene and exposure give the same bytes on the same engine.
 * @throws SceneError when the scene has no exposure of that name. */
export function simulateExposure(scene: Scene, exposure: string | SceneExposure): SimulatedExposure {
  const wanted = typeof exposure === "string" ? findExposure(scene, exposure) : exposure;
  const optics = buildOptics(scene, wanted);
  const detector = buildDetector(scene);
  const { nx, ny } = optics;
  const spectra = makeSpectra(scene, wanted, optics);
  const light =
    wanted.kind === "detector-flat" ? detectorFlatLight(scene, wanted, nx, ny) : spreadFibres(optics, spectra.flux);
  const share = wanted.kind === "detector-flat" ? 0 : scene.light.scattered_share;
  const scattered = scatteredLight(light, nx, ny, share);
  const expected = expectedElectrons(
    detector,
    wanted,
    light.map((electrons, i) => electrons + scattered[i]),
  );
  const cosmicRays = cosmicRayImage(scene, wanted, nx, ny);
  const electrons = countElectrons(detector, wanted, expected).map((counted, i) => counted + cosmicRays[i]);
  const saturated = new Uint8Array(nx * ny);
  const raw = readOut(detector, wanted, electrons, saturated);
  return {
    name: wanted.name,
    kind: wanted.kind,
    raw,
    cards: exposureCards(scene, wanted, detector.layout),
    truth: {
      ...opticalTruth(optics),
      ...spectra,
      shift: wanted.shift,
      stretch: wanted.stretch,
      scattered,
      cosmicRays,
      saturated,
      bad: detector.bad,
      response: detector.response,
      expectedElectrons: () => expected.slice(),
      correctedElectrons: () => correctPerfectly(detector, wanted, raw),
    },
  };
}

function findExposure(scene: Scene, name: string): SceneExposure {
  const found = scene.exposure.find((exposure) => exposure.name === name);
  if (found) return found;
  const names = scene.exposure.map((exposure) => exposure.name).join(", ");
  throw new SceneError(`${scene.name}: no exposure is called ${name}; the scene has ${names}`);
}

function opticalTruth(optics: Optics) {
  const { nx, ny, nFibre, block, lit, sky, trace, sigma, wave, traceLegendre, sigmaLegendre, dispersionShift } = optics;
  return {
    ...{ nx, ny, nFibre, block, lit, sky, trace, sigma, wave, traceLegendre, sigmaLegendre, dispersionShift },
    traceTerms: traceLegendre.length / nFibre,
    sigmaTerms: sigmaLegendre.length / nFibre,
    truthProfile: (k: number, x: number, y0: number, n: number) => {
      const i = k * nx + x;
      const weights = new Float64Array(n);
      profileWeights(optics.table, trace[i], optics.sigma[i], optics.secondShare[i], y0, n, weights);
      return weights;
    },
  };
}

/** A lamp straight on the detector, fainter towards the corners. */
function detectorFlatLight(scene: Scene, exposure: SceneExposure, nx: number, ny: number): Float64Array {
  const level = scene.light.detector_flat_rate * exposure.seconds * exposure.brightness;
  return new Float64Array(nx * ny).map((_zero, i) => {
    const tx = columnArgument(i % nx, nx);
    const ty = columnArgument(Math.floor(i / nx), ny);
    return level * (1 - 0.04 * tx * tx - 0.03 * ty * ty + 0.02 * tx);
  });
}

function correctPerfectly(detector: Detector, exposure: SceneExposure, raw: RawImage): Float32Array {
  const out = new Float32Array(detector.nx * detector.ny);
  const dark = detector.scene.detector.dark * exposure.seconds;
  for (const [a, { data, place }] of detector.layout.amplifiers.entries()) {
    const level = biasLevel(detector.scene, exposure, a);
    const { gain } = detector.scene.detector.amplifier[a];
    for (let row = data.y0; row < data.y1; row++) {
      const bias = level(row);
      for (let at = data.x0; at < data.x1; at++) {
        const column = place.x0 + at - data.x0;
        const i = column * detector.step1 + row * detector.step2;
        const electrons = gain * (raw.adu[row * raw.n1 + at] - bias - detector.biasPattern[column]);
        out[i] = (electrons - dark) / detector.response[i];
      }
    }
  }
  return out;
}
