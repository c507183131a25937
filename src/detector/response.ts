/** The pixel response r: a detector flat over its own smooth large-scale shape, amplifier by amplifier, so that neither
 * the lamp's illumination nor an error of a gain goes into it. Mean of r is 1. */
import type { Region } from "./assemble.js";
import { clippedScatter, medianOf, thinned } from "./clip.js";
import type { Stack } from "./combine.js";
import { largeScaleShape } from "./largeScaleShape.js";

/** Below this a pixel is no detector any more; above its inverse it is hot or glued to a neighbour (common practice). */
const LOWEST_RESPONSE = 0.3;
/** Where the lamp leaves less than this share of its median, the flat says nothing. */
const UNLIT_SHARE = 0.02;

export interface PixelResponse {
  /** ny × nx; 1 where the flat says nothing. */
  response: Float32Array;
  /** ny × nx: (σ_r / r)². */
  relativeVariance: Float32Array;
  /** ny × nx: 1 where the response is too low, too high or unknown. */
  unusable: Uint8Array;
  /** Robust scatter of r about 1, an amplifier. */
  scatter: number[];
}

/** @param stack the combined flat with its variance, any scale. */
export function pixelResponse(stack: Stack, nx: number, ny: number, regions: Region[]): PixelResponse {
  const response = new Float32Array(nx * ny).fill(1);
  const relativeVariance = new Float32Array(nx * ny);
  const unusable = new Uint8Array(nx * ny).fill(1);
  const floor = UNLIT_SHARE * medianOf(thinned(stack.mean));
  const scatter = regions.map((region) => {
    const shape = largeScaleShape(stack.mean, nx, region);
    const seen: number[] = [];
    for (let y = region.y0; y < region.y1; y++) {
      const row = shape(y);
      for (let x = region.x0; x < region.x1; x++) {
        const at = y * nx + x;
        const smooth = row[x - region.x0];
        const r = stack.mean[at] / smooth;
        if (!(smooth > floor) || !(r >= LOWEST_RESPONSE && r <= 1 / LOWEST_RESPONSE)) continue;
        response[at] = r;
        relativeVariance[at] = stack.variance[at] / stack.mean[at] ** 2;
        unusable[at] = 0;
        if ((x + 7 * y) % 5 === 0) seen.push(r);
      }
    }
    return clippedScatter(seen).sigma;
  });
  return { response, relativeVariance, unusable, scatter };
}
