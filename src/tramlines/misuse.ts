/** Frames that are no fibre flat: told from one before any fibre is sought, so that the message names the mistake. */
import { medianOf, quantileOfSorted, sortedFinite } from "../detector/clip.js";
import { MaskBit } from "../detector/frame.js";
import type { Kernels } from "../kernels/module.js";
import { TraceError } from "./errors.js";
import type { Peak } from "./find.js";
import { type Flat, pixelVariance } from "./flat.js";

/** The median column of an arc holds less than this share of what its brightest columns hold. */
const ARC_SHARE = 0.08;
/** Brightness that counts as light: σ of a pixel. */
const KAPPA_LIGHT = 5;
/** Share of saturated pixels on the tramlines: more makes a flat useless, less is worth a word. */
const SATURATED_USELESS = 0.2;
const SATURATED_WARNING = 0.002;
/** Bright fibres of a flat over its faint ones (90 % to 10 %). */
const UNEQUAL = 5;

/** @throws TraceError for a frame without light, with light at isolated columns only, or saturated. */
export function requireFlat(kernels: Kernels, flat: Flat): void {
  const contrast = columnContrasts(kernels, flat);
  const brightest = quantileOfSorted(contrast, 0.98);
  const typical = quantileOfSorted(contrast, 0.5);
  const noise = medianNoise(flat);
  if (!(brightest > KAPPA_LIGHT * noise)) {
    throw new TraceError(
      `${flat.name}: there is no light in it (brightest columns vary by ${brightest.toFixed(1)} e⁻ along the slit, noise is ` +
        `${noise.toFixed(1)} e⁻); a fibre flat with the lamp on is needed to trace.`,
    );
  }
  if (typical < ARC_SHARE * brightest) {
    throw new TraceError(
      `${flat.name}: light only at isolated columns (the median column has ${((100 * typical) / brightest).toFixed(1)} % of the ` +
        "brightest ones' contrast), as in an arc; give a fibre flat, whose fibres shine along the whole dispersion.",
    );
  }
}

/** Sorted, of a sample of columns: 90 % quantile less 5 % quantile along the slit. */
function columnContrasts(kernels: Kernels, flat: Flat): Float64Array {
  const { nx, ny, electrons, nUsed } = flat;
  const contrasts: number[] = [];
  const step = Math.max(1, Math.floor(nx / 400));
  const rowStep = Math.max(1, Math.floor(ny / 1200));
  const bench = kernels.workbench(8 * ny, 1);
  const values = bench.float64(ny);
  for (let x = 0; x < nx; x += step) {
    let n = 0;
    for (let at = x; at < nx * ny; at += rowStep * nx) if (nUsed[at] > 0) values[n++] = electrons[at];
    if (n === 0 || n < 0.2 * (ny / rowStep)) continue;
    const bright = bench.call.quantile(values.byteOffset, n, 0.95);
    contrasts.push(bright - bench.call.quantile(values.byteOffset, n, 0.05));
  }
  return sortedFinite(contrasts);
}

/** Scatter that a column without light shows between its 5 % and 95 % quantiles, e⁻. */
function medianNoise(flat: Flat): number {
  const { nx, ny } = flat;
  const sample: number[] = [];
  for (let at = 0; at < nx * ny; at += 9973) sample.push(pixelVariance(flat.frame, at, 0));
  return Math.sqrt(medianOf(sample));
}

/** What is odd about the fibres' light. @throws TraceError when the flat is saturated. */
export function flatWarnings(flat: Flat, peaks: Peak[], centreOfColumn: (x: number) => Float64Array): string[] {
  const warnings: string[] = [];
  const share = saturatedShare(flat, centreOfColumn);
  if (share > SATURATED_USELESS) {
    throw new TraceError(
      `${flat.name}: ${(100 * share).toFixed(0)} % of the pixels on the tramlines are saturated; give a flat of shorter exposure.`,
    );
  }
  if (share > SATURATED_WARNING) {
    warnings.push(
      `${flat.name}: ${(100 * share).toFixed(1)} % of the pixels on the tramlines are saturated and were left out; a shorter exposure is better.`,
    );
  }
  const lights = sortedFinite(peaks.map((peak) => peak.light));
  const ratio = quantileOfSorted(lights, 0.9) / quantileOfSorted(lights, 0.1);
  if (ratio > UNEQUAL) {
    warnings.push(
      `${flat.name}: its fibres are very unequal (the brighter ones have ${ratio.toFixed(0)} times the light of the fainter ones), ` +
        "as in a science frame; make sure that this is a fibre flat.",
    );
  }
  return warnings;
}

function saturatedShare(flat: Flat, centreOfColumn: (x: number) => Float64Array): number {
  const { nx, ny } = flat;
  let n = 0;
  let saturated = 0;
  const step = Math.max(1, Math.floor(nx / 100));
  for (let x = 0; x < nx; x += step) {
    for (const centre of centreOfColumn(x)) {
      const y = Math.round(centre);
      if (y < 0 || y >= ny) continue;
      n++;
      if ((flat.mask[y * nx + x] & MaskBit.saturated) !== 0) saturated++;
    }
  }
  return n > 0 ? saturated / n : 0;
}
