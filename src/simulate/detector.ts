/** The detector: response, bad columns, bias levels and the readout into ADU.
 *
 *     ADU = (electrons + read noise) / gain + bias(row) + pattern(column), rounded, clipped at saturation */
import { poisson } from "../random/poisson.js";
import { openStream } from "../random/streams.js";
import { type AmplifierLayout, layOutReadout, type ReadoutLayout } from "./readoutLayout.js";
import type { Scene, SceneExposure } from "./scene.js";

/** A bad column keeps this share of its light and adds this many electrons. */
const BAD_COLUMN_RESPONSE = 0.3;
const BAD_COLUMN_ELECTRONS = 400;

export interface Detector {
  scene: Scene;
  nx: number;
  ny: number;
  layout: ReadoutLayout;
  /** Steps in the assembled image along FITS axis 1 and 2, dispersion along x. */
  step1: number;
  step2: number;
  /** ny × nx. */
  response: Float32Array;
  /** ny × nx: 1 = bad. */
  bad: Uint8Array;
  /** Size[0], ADU. */
  biasPattern: Float64Array;
}

export function buildDetector(scene: Scene): Detector {
  const { detector } = scene;
  const layout = layOutReadout(detector);
  if (typeof layout === "string") throw new RangeError(`detector.amplifier: ${layout}`);
  const [n1, n2] = detector.size;
  const along = detector.dispersion_axis === 1;
  const [nx, ny] = along ? [n1, n2] : [n2, n1];
  const [step1, step2] = along ? [1, nx] : [nx, 1];
  const response = new Float32Array(nx * ny);
  const dice = openStream(scene.seed, "response");
  for (let i = 0; i < response.length; i++) response[i] = Math.max(0.2, 1 + detector.response_rms * dice.normal());
  const bad = new Uint8Array(nx * ny);
  for (const column of detector.bad_columns) {
    for (let i2 = 0; i2 < n2; i2++) {
      const i = (column - 1) * step1 + i2 * step2;
      response[i] *= BAD_COLUMN_RESPONSE;
      bad[i] = 1;
    }
  }
  return { scene, nx, ny, layout, step1, step2, response, bad, biasPattern: biasPattern(scene, n1) };
}

function biasPattern({ detector, seed }: Scene, n1: number): Float64Array {
  const dice = openStream(seed, "bias pattern");
  return Float64Array.from({ length: n1 }, () => detector.bias_pattern * dice.normal());
}

/** Mean electrons in every pixel, ny × nx: response × light + dark + what a bad column adds. */
export function expectedElectrons(detector: Detector, exposure: SceneExposure, light: Float64Array): Float64Array {
  const dark = detector.scene.detector.dark * exposure.seconds;
  return light.map((electrons, i) => detector.response[i] * electrons + dark + detector.bad[i] * BAD_COLUMN_ELECTRONS);
}

/** Over any full well: brighter light is drawn as this, and clipped by the converter all the same. */
const MOST_ELECTRONS = 1e9;

/** Poisson electrons, a stream a row: a change of the light in one row leaves the others' noise alone. */
export function countElectrons(detector: Detector, exposure: SceneExposure, expected: Float64Array): Float64Array {
  const { nx, ny, scene } = detector;
  const counted = new Float64Array(nx * ny);
  for (let y = 0; y < ny; y++) {
    const stream = openStream(scene.seed, exposure.name, "photons", y);
    for (let i = y * nx; i < (y + 1) * nx; i++) counted[i] = poisson(stream, Math.min(expected[i], MOST_ELECTRONS));
  }
  return counted;
}

export interface RawImage {
  /** As in the file: NAXIS1 × NAXIS2. */
  n1: number;
  n2: number;
  adu: Uint16Array;
}

/** Reads `electrons` (ny × nx) out. `saturated` (ny × nx) gets a 1 where the converter clipped. */
export function readOut(
  detector: Detector,
  exposure: SceneExposure,
  electrons: Float64Array,
  saturated: Uint8Array,
): RawImage {
  const { n1, n2, amplifiers } = detector.layout;
  const raw: RawImage = { n1, n2, adu: new Uint16Array(n1 * n2) };
  for (const [a, amplifier] of amplifiers.entries()) {
    readAmplifier(detector, exposure, a, amplifier, electrons, saturated, raw);
  }
  return raw;
}

function readAmplifier(
  detector: Detector,
  exposure: SceneExposure,
  index: number,
  { data, overscan, place }: AmplifierLayout,
  electrons: Float64Array,
  saturated: Uint8Array,
  raw: RawImage,
): void {
  const { gain, read_noise } = detector.scene.detector.amplifier[index];
  const top = detector.scene.detector.saturation;
  const level = biasLevel(detector.scene, exposure, index);
  const noise = openStream(detector.scene.seed, exposure.name, "read noise", index);
  for (let row = data.y0; row < data.y1; row++) {
    const bias = level(row);
    for (let at = data.x0; at < data.x1; at++) {
      const column = place.x0 + at - data.x0;
      const i = column * detector.step1 + row * detector.step2;
      const adu = Math.round((electrons[i] + read_noise * noise.normal()) / gain + bias + detector.biasPattern[column]);
      if (adu >= top) saturated[i] = 1;
      raw.adu[row * raw.n1 + at] = Math.min(top, Math.max(0, adu));
    }
    for (let at = overscan.x0; at < overscan.x1; at++) {
      const adu = Math.round((read_noise * noise.normal()) / gain + bias);
      raw.adu[row * raw.n1 + at] = Math.min(top, Math.max(0, adu));
    }
  }
}

/** ADU at a file row: the amplifier's level with a slow wander of its own in every exposure. */
export function biasLevel(scene: Scene, exposure: SceneExposure, index: number): (row: number) => number {
  const { bias, drift } = scene.detector.amplifier[index];
  const dice = openStream(scene.seed, exposure.name, "bias drift", index);
  const [start, slope, swing, phase] = [dice.normal(), dice.normal(), dice.normal(), 2 * Math.PI * dice.uniform()];
  const nRow = scene.detector.size[1];
  return (row) => {
    const t = (2 * row) / (nRow - 1) - 1;
    return bias + drift * (0.5 * start + slope * t + 0.5 * swing * Math.sin(phase + Math.PI * t));
  };
}
