/** What the frame itself tells before its spectra are taken: the background, and how well the profiles fit. */
import type { Frame } from "../detector/frame.js";
import type { Precision } from "../kernels/banded.js";
import { ExtractionBench } from "../kernels/extraction.js";
import type { Kernels } from "../kernels/module.js";
import type { ExtractionStart, SmoothBackground } from "../reference/extract.js";
import type { Tramlines } from "../tramlines/tramlines.js";
import { noBackground } from "./background.js";
import { extractionInput } from "./input.js";
import { measureMisfit } from "./misfit.js";
import type { ExtractionOptions } from "./options.js";
import { type ExtractionPlan, planExtraction } from "./plan.js";
import { choosePrecision } from "./precision.js";
import { type BackgroundFit, measureBackground } from "./smooth.js";

/** An extraction ready to run: memory laid out, background and misfit settled. */
export interface OpenFrame {
  bench: ExtractionBench;
  input: ExtractionStart;
  plan: ExtractionPlan;
  precision: Precision;
  /** Null when none was asked for. */
  background: BackgroundFit | null;
  /** ε: share of the light nearby by which pixels miss the profiles beyond noise. */
  profileError: number;
}

/** Opens `frame` with `tramlines` as they stand. `start`: its background, nearly.
 * @throws RangeError when no fibre is lit, or tramlines cross. */
export function openFrame(
  kernels: Kernels,
  frame: Frame,
  tramlines: Tramlines,
  options: ExtractionOptions,
  start?: SmoothBackground,
): OpenFrame {
  const plan = planExtraction(tramlines, options.method === "boxcar" ? options.halfAperture : 0);
  const background = options.background === false ? null : measureBackground(kernels, frame, tramlines, start);
  const input = extractionInput(frame, tramlines, plan, options, background ?? noBackground());
  const rows = Int32Array.from(plan.active);
  const precision = choosePrecision(options.precision ?? "f64", plan);
  const bench = new ExtractionBench(kernels, input, rows, tramlines.nFibre, precision, frame.memory);
  return { bench, input, plan, precision, background, profileError: settleProfileError(bench, input) };
}

/** Measures ε and has `bench` use it from here on. */
function settleProfileError(bench: ExtractionBench, input: ExtractionStart): number {
  if (input.kappa === 0) return input.profileError;
  const profileError = measureMisfit(bench, input.nx, input.blockColumns, input.kappa, input.profileError, input.ny);
  bench.setProfileError(profileError);
  return profileError;
}
