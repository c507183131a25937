/** What the frame itself tells before its spectra are taken: the background, fitted in turns with the fibres on a sample of
 * the columns, since fibres' wings reach into every gap; and how well the profiles fit. */
import type { Frame } from "../detector/frame.js";
import { ExtractionBench } from "../kernels/extraction.js";
import type { Kernels } from "../kernels/module.js";
import { MaskBit } from "../reference/bits.js";
import type { ExtractionInput } from "../reference/extract.js";
import type { Tramlines } from "../tramlines/tramlines.js";
import { type BackgroundFit, cellColumns, fitBackground } from "./background.js";
import { extractionInput } from "./input.js";
import { measureMisfit } from "./misfit.js";
import type { ExtractionOptions } from "./options.js";
import { type ExtractionPlan, planExtraction } from "./plan.js";

/** Fits in turns: of so many groups of columns one is looked at, in the last turn all. The first turn moves what light there
 * is to move between fibres and background; the next changes it by hundredths of an electron, and uses every gap. */
const sampleSteps = [2, 1];

export interface SettledFrame {
  /** Null when none was asked for. */
  background: BackgroundFit | null;
  /** ε: share of the light nearby by which pixels miss the profiles beyond noise. */
  profileError: number;
}

/** An extraction ready to run: memory laid out, background and misfit settled. */
export interface OpenFrame extends SettledFrame {
  bench: ExtractionBench;
  input: ExtractionInput;
  plan: ExtractionPlan;
}

/** Opens `frame` with `tramlines` as they stand.
 * @throws RangeError when no fibre is lit, or tramlines cross. */
export function openFrame(kernels: Kernels, frame: Frame, tramlines: Tramlines, options: ExtractionOptions): OpenFrame {
  const plan = planExtraction(tramlines, options.method === "boxcar" ? options.halfAperture : 0);
  const input = extractionInput(frame, tramlines, plan, options);
  const rows = Int32Array.from(plan.active);
  const bench = new ExtractionBench(kernels, input, rows, tramlines.nFibre, options.precision ?? "f64");
  return { bench, input, plan, ...settleFrame(bench, input, frame, tramlines, options) };
}

/** Measures both and has `bench` use them from here on; leaves its spectra and rejections as if nothing had been run. */
export function settleFrame(
  bench: ExtractionBench,
  input: ExtractionInput,
  frame: Frame,
  tramlines: Tramlines,
  options: ExtractionOptions,
): SettledFrame {
  let background: BackgroundFit | null = null;
  let profileError = settleProfileError(bench, input);
  if (options.background !== false) {
    for (const sampleStep of sampleSteps) {
      background = fitBackground(frame, tramlines, lightBetweenFibres(bench, input, sampleStep));
      bench.setBackground(background);
    }
    profileError = settleProfileError(bench, input);
  }
  return { background, profileError };
}

function settleProfileError(bench: ExtractionBench, input: ExtractionInput): number {
  if (input.kappa === 0) return input.profileError;
  const profileError = measureMisfit(bench, input.nx, input.blockColumns, input.kappa, input.profileError);
  bench.setProfileError(profileError);
  return profileError;
}

/** The frame without its fibres' light in a sample of columns, NaN elsewhere and where a cosmic ray hit. */
function lightBetweenFibres(bench: ExtractionBench, input: ExtractionInput, sampleStep: number): Float32Array {
  const { nx, ny, electrons } = input;
  const light = new Float32Array(nx * ny).fill(Number.NaN);
  bench.keepModel(true);
  bench.rejected.fill(0);
  for (let x0 = 0; x0 < nx; x0 += sampleStep * cellColumns) {
    const x1 = Math.min(x0 + cellColumns, nx);
    bench.run(x0, x1);
    for (let y = 0; y < ny; y++) {
      for (let at = y * nx + x0; at < y * nx + x1; at++) {
        if ((bench.rejected[at] & MaskBit.cosmic) === 0) light[at] = electrons[at] - bench.model[at];
      }
    }
  }
  bench.keepModel(false);
  bench.rejected.fill(0);
  return light;
}
