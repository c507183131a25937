/** Kernels against their readable reference on a user's own frame: the largest differences, and the bounds they must keep. */
import type { Frame } from "../detector/frame.js";
import { ExtractionBench } from "../kernels/extraction.js";
import { type Kernels, loadKernels } from "../kernels/module.js";
import { MaskBit } from "../reference/bits.js";
import { type ExtractionOutput, type ExtractionStart, extractColumns, type Method } from "../reference/extract.js";
import { settleGrownColumns } from "../reference/grown.js";
import { blockProfiles } from "../reference/profile.js";
import { checkGeometry } from "../tramlines/file.js";
import type { Tramlines } from "../tramlines/tramlines.js";
import { adaptTramlines } from "./adapt.js";
import type { ExtractionOptions } from "./options.js";
import { type ColumnRunner, runPasses } from "./passes.js";
import { openFrame } from "./settle.js";

export interface MethodCheck {
  method: Method;
  crosstalkCorrected: boolean;
  precision: "f32" | "f64";
  /** Spectrum points compared. */
  nPoint: number;
  /** Largest |Δflux| / (|flux| + σ). */
  worstRelative: number;
  /** Largest |Δflux| / σ. */
  worstSigma: number;
  /** Largest |Δflux| over the bound that it must keep; above 1 the check fails. */
  worstOverBound: number;
  /** Largest |Δvariance| / variance. */
  worstVariance: number;
  /** Pixels rejected by one and not by the other. */
  rejectedDiffer: number;
  /** Points with other flags. */
  flagsDiffer: number;
  passed: boolean;
}

export interface Verification {
  /** Largest absolute difference of a pixel's weight; must stay below 1e-14. */
  worstWeight: number;
  checks: MethodCheck[];
  passed: boolean;
}

/** f64: what rounding leaves of sums over a window, with room for the frame's worst conditioning. */
const relativeBound64 = 1e-10;
const weightBound = 1e-14;
/** Blocks of columns whose weights are compared. */
const weightBlocks = 32;
/** Relative, on variances: they bring the matrix's rounding alone. */
const varianceBound64 = 1e-9;
const varianceBound32 = 1e-3;
const unitRoundoff32 = 2 ** -24;

/** Runs every method through kernel and reference, first pass, growth and second pass included.
 * @throws RangeError as `extractFrame`. */
export async function verifyExtraction(
  frame: Frame,
  tramlines: Tramlines,
  options: ExtractionOptions = {},
): Promise<Verification> {
  checkGeometry(frame, tramlines);
  const kernels = await loadKernels();
  const adapted = adaptTramlines(kernels, frame, tramlines, options).tramlines;
  const cases: [Method, boolean][] = [
    ["joint", false],
    ["optimal", true],
    ["optimal", false],
    ["boxcar", true],
    ["boxcar", false],
  ];
  const checks: MethodCheck[] = [];
  let worstWeight = 0;
  for (const [method, crosstalk] of cases) {
    const opened = openFrame(kernels, frame, adapted, { ...options, method, crosstalk, precision: "f64" });
    const background = opened.background ?? opened.input.background;
    const input = { ...opened.input, profileError: opened.profileError, background };
    if (checks.length === 0) worstWeight = compareWeights(opened.bench, input);
    const share = checks.length / (2 * cases.length);
    const expected = runReference(input, (done) => options.onProgress?.(share + done / cases.length));
    for (const precision of ["f64", "f32"] as const) checks.push(compareRuns(kernels, input, expected, precision));
  }
  return { worstWeight, checks, passed: worstWeight < weightBound && checks.every((check) => check.passed) };
}

interface Run {
  output: ExtractionOutput;
  rejected: Uint8Array;
}

function runReference(input: ExtractionStart, onProgress: (share: number) => void): Run {
  const n = input.nFibre * input.nx;
  const numbers = () => new Float64Array(n).fill(Number.NaN);
  const output: ExtractionOutput = {
    flux: numbers(),
    variance: numbers(),
    neighbourCovariance: numbers(),
    flags: new Int32Array(n),
    chi2: numbers(),
    background: numbers(),
  };
  const rejected = new Uint8Array(input.nx * input.ny);
  const current = { ...input, rejected };
  const runner: ColumnRunner = {
    rejected,
    run: (x0, x1) => extractColumns(current, output, x0, x1),
    settleGrown: (x0, x1) => settleGrownColumns(current, output, x0, x1),
  };
  runPasses(runner, input, onProgress);
  return { output, rejected };
}

function compareRuns(kernels: Kernels, input: ExtractionStart, expected: Run, precision: "f32" | "f64"): MethodCheck {
  const bench = openBench(kernels, input, precision);
  runPasses(bench, input);
  const sameColumn = columnsRejectedAlike(bench.rejected, expected.rejected, input);
  const found = bench.output;
  const check: MethodCheck = {
    method: input.method,
    crosstalkCorrected: input.crosstalk || input.method === "joint",
    precision,
    nPoint: 0,
    worstRelative: 0,
    worstSigma: 0,
    worstOverBound: 0,
    worstVariance: 0,
    rejectedDiffer: countDifferent(bench.rejected, expected.rejected),
    flagsDiffer: 0,
    passed: false,
  };
  for (let i = 0; i < found.flux.length; i++) {
    if (!sameColumn[i % input.nx]) continue;
    if (found.flags[i] !== expected.output.flags[i]) check.flagsDiffer++;
    comparePoint(check, found, expected.output, i, errorBound(input, expected.output, i, precision));
  }
  check.passed = hasPassed(check, expected);
  return check;
}

/** f64 must agree in every flag and rejection. f32 may fall to the other side of a threshold now and then, but in no more
 * than one in a hundred rejections: columns that differ are not compared, and must stay rare. */
function hasPassed(check: MethodCheck, expected: Run): boolean {
  const fluxesAgree = check.nPoint > 0 && check.worstOverBound <= 1;
  if (check.precision === "f64") {
    const alike = check.rejectedDiffer === 0 && check.flagsDiffer === 0;
    return fluxesAgree && alike && check.worstVariance <= varianceBound64;
  }
  const nRejected = expected.rejected.reduce((n, bits) => n + (isRejected(bits) ? 1 : 0), 0);
  return fluxesAgree && check.rejectedDiffer <= 2 + nRejected / 100 && check.worstVariance <= varianceBound32;
}

function openBench(kernels: Kernels, input: ExtractionStart, precision: "f32" | "f64"): ExtractionBench {
  const rows = Int32Array.from({ length: input.nFibre }, (_, k) => k);
  return new ExtractionBench(kernels, input, rows, input.nFibre, precision);
}

function comparePoint(
  check: MethodCheck,
  found: ExtractionOutput,
  expected: ExtractionOutput,
  i: number,
  bound: number,
): void {
  const [flux, variance] = [expected.flux[i], expected.variance[i]];
  if (Number.isNaN(flux) !== Number.isNaN(found.flux[i])) check.worstOverBound = Number.POSITIVE_INFINITY;
  if (!(variance > 0)) return;
  const difference = Math.abs(found.flux[i] - flux);
  check.nPoint++;
  check.worstRelative = Math.max(check.worstRelative, difference / (Math.abs(flux) + Math.sqrt(variance)));
  check.worstSigma = Math.max(check.worstSigma, difference / Math.sqrt(variance));
  check.worstOverBound = Math.max(check.worstOverBound, difference / bound);
  check.worstVariance = Math.max(check.worstVariance, Math.abs(found.variance[i] / variance - 1));
}

/** How far a flux may lie from the reference's. f64: 1e-10·(|flux| + σ). f32: each sum over a window of n pixels carries
 * a relative error of at most γ = (n + 12)·u (Higham, Accuracy and Stability of Numerical Algorithms, §3.1; 12 for
 * interpolation, weighting and the band's solution), on the light of the fibre and of those that overlap it and on the
 * background; matrix and right-hand side each bring it, and the matrix's inverse, whose norm is below 2 while the
 * fibres stand two widths apart, passes it on. Weights that differ in the seventh digit move a flux by 1e-4 σ at most. */
function errorBound(input: ExtractionStart, expected: ExtractionOutput, i: number, precision: "f32" | "f64"): number {
  const sigma = Math.sqrt(expected.variance[i]);
  if (precision === "f64") return relativeBound64 * (Math.abs(expected.flux[i]) + sigma);
  const { nx, nFibre, bandwidth, halfWindow } = input;
  const k = Math.floor(i / nx);
  const nWindow = 2 * halfWindow + 1;
  let light = nWindow * Math.abs(expected.background[i]);
  for (let m = Math.max(k - bandwidth, 0); m <= Math.min(k + bandwidth, nFibre - 1); m++) {
    light += Math.abs(expected.flux[m * nx + (i % nx)]) || 0;
  }
  return 4 * (nWindow + 12) * unitRoundoff32 * light + 1e-4 * sigma;
}

/** Columns in which both rejected the same pixels; a pixel on the threshold may fall to either side in f32. */
function columnsRejectedAlike(a: Uint8Array, b: Uint8Array, input: ExtractionStart): Uint8Array {
  const same = new Uint8Array(input.nx).fill(1);
  for (let i = 0; i < a.length; i++) if (isRejected(a[i]) !== isRejected(b[i])) same[i % input.nx] = 0;
  return same;
}

function countDifferent(a: Uint8Array, b: Uint8Array): number {
  return a.reduce((n, bits, i) => n + (isRejected(bits) === isRejected(b[i]) ? 0 : 1), 0);
}

function isRejected(bits: number): boolean {
  return (bits & (MaskBit.cosmic | MaskBit.grown)) !== 0;
}

/** Weights of every fibre at the nodes of some blocks. */
function compareWeights(bench: ExtractionBench, input: ExtractionStart): number {
  let worst = 0;
  const step = input.blockColumns * Math.max(1, Math.floor(input.nx / (input.blockColumns * weightBlocks)));
  for (let x0 = 0; x0 < input.nx; x0 += step) {
    const found = bench.nodeWeights(x0);
    blockProfiles(input, x0).weights.forEach((weight, i) => {
      worst = Math.max(worst, Math.abs(found[i] - weight));
    });
  }
  return worst;
}
