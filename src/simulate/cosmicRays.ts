/** Cosmic rays: straight tracks of charge through the detector, laid down in steps finer than a pixel. */
import { poisson } from "../random/poisson.js";
import { openStream, type Stream } from "../random/streams.js";
import type { Scene, SceneExposure } from "./scene.js";

const STEP_PIXELS = 0.1;

/** ny × nx, e⁻; no further noise belongs on it. */
export function cosmicRayImage(scene: Scene, exposure: SceneExposure, nx: number, ny: number): Float32Array {
  const image = new Float32Array(nx * ny);
  const settings = scene.cosmic_rays;
  if (!settings || !exposure.cosmic_rays) return image;
  const stream = openStream(scene.seed, exposure.name, "cosmic rays");
  const seconds = exposure.seconds + settings.readout_seconds;
  const nHit = poisson(stream, (settings.rate * seconds) / 1000);
  for (let i = 0; i < nHit; i++) addTrack(image, nx, ny, stream, settings);
  return image;
}

/** Length: exponential; angle: uniform; charge: log-normal, and more of it on a longer track; a little random along it. */
function addTrack(
  image: Float32Array,
  nx: number,
  ny: number,
  stream: Stream,
  settings: NonNullable<Scene["cosmic_rays"]>,
): void {
  const x0 = stream.uniform() * nx - 0.5;
  const y0 = stream.uniform() * ny - 0.5;
  const angle = 2 * Math.PI * stream.uniform();
  const length = Math.min(-settings.length * Math.log(1 - stream.uniform()), 20 * settings.length);
  const electrons = settings.electrons * Math.exp(0.7 * stream.normal()) * (0.5 + (0.5 * length) / settings.length);
  const nStep = Math.max(1, Math.round(length / STEP_PIXELS));
  for (let i = 0; i < nStep; i++) {
    const along = (i + 0.5) * (length / nStep);
    const charge = (electrons / nStep) * (0.6 + 0.8 * stream.uniform());
    addCharge(image, nx, ny, x0 + along * Math.cos(angle), y0 + along * Math.sin(angle), charge);
  }
}

/** Charge at a point as a box one pixel wide: shared among the four pixels that it overlaps. */
function addCharge(image: Float32Array, nx: number, ny: number, x: number, y: number, charge: number): void {
  const xLow = Math.floor(x);
  const yLow = Math.floor(y);
  const fx = x - xLow;
  const fy = y - yLow;
  for (const [column, xPart] of [
    [xLow, 1 - fx],
    [xLow + 1, fx],
  ] as const) {
    for (const [row, yPart] of [
      [yLow, 1 - fy],
      [yLow + 1, fy],
    ] as const) {
      if (column < 0 || column >= nx || row < 0 || row >= ny) continue;
      image[row * nx + column] += charge * xPart * yPart;
    }
  }
}
