/** A simulated night on disk: raw frames, the truth behind them, and the files that an observer would have.
 *
 *     DIR/raw/NAME.fits      unsigned 16 bit, overscan included
 *     DIR/truth/NAME.fits    FLUX, TRACE, WAVE (fibre × column), SCATTERED, COSMIC (the frame), FIBRES, LINES
 *     DIR/spectrograph.toml  DIR/badmask.fits */
import fs from "node:fs";
import { join } from "node:path";
import { stringify } from "smol-toml";
import type { OutputHdu } from "../fits/encode.js";
import { refuseToHarm, type WriteOptions, writeFits } from "../fits/write.js";
import { buildDetector, type Detector } from "./detector.js";
import { type SimulatedExposure, simulateExposure, type Truth } from "./exposure.js";
import { sectionOf } from "./readoutLayout.js";
import type { Scene } from "./scene.js";
import { SceneError } from "./sceneMessages.js";

export interface SimulationFiles {
  spectrograph: string;
  badPixels: string;
  /** In the scene's order; `truth` is absent for frames without fibres' light. */
  exposures: { name: string; kind: string; raw: string; truth?: string }[];
}

export interface SimulationOptions extends WriteOptions {
  /** Called before each exposure, and waited for. */
  onExposure?: (name: string, done: number, total: number) => unknown;
}

/** Simulates every exposure of the scene and writes all of it under `dir`, which is made when missing.
 * @throws FitsError when a file is in the way (checked for all of them before the first is written) or cannot be
 * written, SceneError when `dir` cannot be made. */
export async function writeSimulation(
  dir: string,
  scene: Scene,
  options: SimulationOptions = {},
): Promise<SimulationFiles> {
  const files = simulationFiles(dir, scene);
  const all = files.exposures.flatMap(({ raw, truth }) => (truth === undefined ? [raw] : [raw, truth]));
  makeFolders(dir);
  for (const path of [files.spectrograph, files.badPixels, ...all]) refuseToHarm(path, options);
  await writeObserverFiles(dir, scene, options);
  for (const [i, { name }] of files.exposures.entries()) {
    await options.onExposure?.(name, i, files.exposures.length);
    await writeExposure(dir, simulateExposure(scene, name), options);
  }
  return files;
}

/** Where `writeSimulation` puts what. */
export function simulationFiles(dir: string, scene: Scene): SimulationFiles {
  return {
    spectrograph: join(dir, "spectrograph.toml"),
    badPixels: join(dir, "badmask.fits"),
    exposures: scene.exposure.map(({ name, kind }) => ({
      name,
      kind,
      raw: join(dir, "raw", `${name}.fits`),
      ...(hasFibreLight(kind) ? { truth: join(dir, "truth", `${name}.fits`) } : {}),
    })),
  };
}

/** Writes one exposure's raw frame and, when fibres shone in it, its truth.
 * @throws FitsError when a file is in the way or cannot be written. */
export async function writeExposure(
  dir: string,
  exposure: SimulatedExposure,
  options: WriteOptions = {},
): Promise<void> {
  makeFolders(dir);
  const { n1, n2, adu } = exposure.raw;
  const image = { nx: n1, ny: n2, data: adu, unit: "adu" };
  await writeFits(
    join(dir, "raw", `${exposure.name}.fits`),
    [{ kind: "primary", header: exposure.cards, image }],
    options,
  );
  if (!hasFibreLight(exposure.kind)) return;
  await writeFits(join(dir, "truth", `${exposure.name}.fits`), truthHdus(exposure), options);
}

/** Writes spectrograph.toml and badmask.fits.
 * @throws FitsError when a file is in the way or cannot be written. */
export async function writeObserverFiles(dir: string, scene: Scene, options: WriteOptions = {}): Promise<void> {
  makeFolders(dir);
  const detector = buildDetector(scene);
  await writeFits(join(dir, "badmask.fits"), [{ kind: "primary", header: [], image: badMask(detector) }], options);
  const path = join(dir, "spectrograph.toml");
  refuseToHarm(path, options);
  const temporary = join(dir, `.spectrograph.toml.${process.pid}.part`);
  fs.writeFileSync(temporary, spectrographToml(scene));
  fs.renameSync(temporary, path);
}

/** The spectrograph as an observer would describe it. */
export function spectrographToml(scene: Scene): string {
  const { detector, slit, wavelength } = scene;
  const { amplifiers } = buildDetector(scene).layout;
  return stringify({
    name: scene.name,
    detector: {
      dispersion_axis: detector.dispersion_axis,
      saturation: detector.saturation,
      bad_pixels: "badmask.fits",
      amplifier: amplifiers.map(({ data, overscan, place }, i) => ({
        gain: detector.amplifier[i].gain,
        read_noise: detector.amplifier[i].read_noise,
        data: sectionOf(data),
        ...(overscan.x1 > overscan.x0 ? { overscan: sectionOf(overscan) } : {}),
        place: sectionOf(place),
      })),
    },
    slit: { blocks: slit.blocks, pitch: slit.pitch, gap: slit.gap, dead: slit.dead, sky: slit.sky },
    wavelength: { medium: wavelength.medium, range: wavelength.range, lamps: wavelength.lamps },
  });
}

function hasFibreLight(kind: string): boolean {
  return kind !== "bias" && kind !== "dark" && kind !== "detector-flat";
}

function makeFolders(dir: string): void {
  try {
    for (const folder of ["raw", "truth"]) fs.mkdirSync(join(dir, folder), { recursive: true });
  } catch (error) {
    const code = (error as NodeJS.ErrnoException).code;
    throw new SceneError(`${dir}: this folder cannot be made (${code}); give one that can be written to`);
  }
}

/** As the frame lies in the file: FITS axis 1 fastest. */
function badMask({ bad, step1, step2, scene }: Detector) {
  const [n1, n2] = scene.detector.size;
  const data = new Uint8Array(n1 * n2).map((_zero, i) => bad[(i % n1) * step1 + Math.floor(i / n1) * step2]);
  return { nx: n1, ny: n2, data };
}

function truthHdus({ name, truth }: SimulatedExposure): OutputHdu[] {
  const { nx, ny, nFibre } = truth;
  const spectra = (hdu: string, data: Float64Array, unit: string): OutputHdu => ({
    kind: "image",
    name: hdu,
    unit,
    nx,
    ny: nFibre,
    data,
  });
  const header = [
    { keyword: "FRAMEID", value: name, comment: "frame that this is the truth of" },
    { keyword: "SHIFT", value: truth.shift, comment: "[pix] along the slit, against the tramlines" },
    { keyword: "STRETCH", value: truth.stretch, comment: "per pixel from the middle row" },
    { keyword: "XSHIFT", value: truth.dispersionShift, comment: "[pix] along dispersion" },
    { keyword: "PIXORIG", value: 0, comment: "pixel numbers count from" },
  ];
  return [
    { kind: "primary", header },
    spectra("FLUX", truth.flux, "electron"),
    spectra("TRACE", truth.trace, "pixel"),
    spectra("WAVE", truth.wave, "Angstrom"),
    { kind: "image", name: "SCATTERED", unit: "electron", nx, ny, data: Float32Array.from(truth.scattered) },
    { kind: "image", name: "COSMIC", unit: "electron", nx, ny, data: truth.cosmicRays },
    fibresTable(truth),
    linesTable(truth),
  ];
}

function fibresTable({ nFibre, block, lit, sky }: Truth): OutputHdu {
  return {
    kind: "table",
    name: "FIBRES",
    columns: [
      { name: "FIBRE", format: "1J", data: Int32Array.from({ length: nFibre }, (_v, k) => k + 1) },
      { name: "BLOCK", format: "1J", data: block },
      { name: "LIT", format: "1L", data: lit },
      { name: "ROLE", format: "8A", data: sky.map((isSky) => (isSky ? "sky" : "target")) },
    ],
  };
}

function linesTable({ lines }: Truth): OutputHdu {
  return {
    kind: "table",
    name: "LINES",
    columns: [
      { name: "FIBRE", format: "1J", data: lines.map(({ fibre }) => fibre + 1) },
      { name: "X", format: "1D", unit: "pixel", data: lines.map(({ x }) => x) },
      { name: "WAVE", format: "1D", unit: "Angstrom", data: lines.map(({ wavelength }) => wavelength) },
      { name: "ELECTRONS", format: "1D", unit: "electron", data: lines.map(({ electrons }) => electrons) },
      { name: "KIND", format: "8A", data: lines.map(({ kind }) => kind) },
    ],
  };
}
