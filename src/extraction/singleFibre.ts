/** Cross-talk seen in a frame in which one fibre, or a few that stand apart, are lit while the tramlines hold all: the light
 * that an estimator finds at dark neighbours over what it finds at the lit fibre,
 *
 *     seen = Σ_x (W d)_k / Σ_x (W d)_m        to compare with C[k][m] / C[m][m] of the profile model
 *
 * No profile enters what is seen but through the weights W, which are those of the science frame, so the two numbers are
 * independent. Errors: noise of the pixels, and the level that dark fibres far from any light are found at, which tells
 * what the scattered light leaves. */
import type { Frame } from "../detector/frame.js";
import { loadKernels } from "../kernels/module.js";
import type { Column } from "../reference/column.js";
import { normalEquations, solveNormal } from "../reference/joint.js";
import { median } from "../reference/median.js";
import { checkGeometry } from "../tramlines/file.js";
import { measureShift, shiftTramlines } from "../tramlines/shift.js";
import type { Tramlines } from "../tramlines/tramlines.js";
import { fitBackground } from "./background.js";
import { estimatorWeights, type LoneEstimator, sharedLight } from "./crosstalkMatrix.js";
import type { Extraction } from "./extract.js";
import { extractionInput } from "./input.js";
import { lightOf, modelColumns, profileColumns, weighByModel } from "./modelColumn.js";

/** A fibre with this share of the brightest one's light is lit. */
const litShare = 0.1;
/** More of the fibres lit than this, and the frame shows no cross-talk. */
const mostLit = 0.2;
/** Excess over noise and over half of the expected leak from which on a column is left out, σ: a cosmic ray. */
const clipSigma = 5;
/** Distance between seen and modelled, in σ, from which on they disagree. */
const disagreeSigma = 4;

export interface SeenLeak {
  /** Slit positions, from 1. */
  lit: number;
  fibre: number;
  /** Seen at `fibre` over seen at `lit`, and its error. */
  share: number;
  error: number;
  /** The same from the profile model. */
  model: number;
}

export interface SingleFibreCheck {
  frame: string;
  estimator: LoneEstimator;
  leaks: SeenLeak[];
  /** Of the leaks, those further than 4 σ from the model's. */
  nDisagree: number;
  warnings: string[];
}

/** A dark fibre and the lit one whose light it may hold, as indices into the active fibres. */
type Pair = [dark: number, lit: number];

/** Raw sums of every active fibre in every column, and what the model makes of the pairs. */
interface Sums {
  nx: number;
  /** [nFibre × nx], e⁻ and e⁻²; NaN where a pixel that counts is not good. */
  raw: Float64Array;
  variance: Float64Array;
  /** [nPair × nx]: C[dark][lit] / C[lit][lit]. */
  model: Float64Array;
}

/** Measures C on `frame`, with the estimator and the variances of the science frame behind `extraction`.
 * @throws RangeError when the frame comes from another readout window, or when no fibre, or over a fifth of them, is lit. */
export async function measureSingleFibre(
  frame: Frame,
  tramlines: Tramlines,
  extraction: Extraction,
): Promise<SingleFibreCheck> {
  checkGeometry(frame, tramlines);
  const { active, bandwidth: reach } = extraction.plan;
  const estimator = extraction.spectra.method === "optimal" ? "optimal" : "boxcar";
  const lit = findLit(frame, tramlines, extraction);
  const bare = onlyLit(
    tramlines,
    lit.map((k) => active[k]),
  );
  const pairs = pairsOf(lit, active.length, reach);
  const sums = takeSums(frame, await placeLines(frame, tramlines, bare), bare, extraction, estimator, pairs);
  const baseline = farLevel(sums, lit, active.length, reach);
  const leaks = pairs.flatMap(([k, m], i) => {
    const leak = leakBetween(k, m, sums.model.subarray(i * frame.nx, (i + 1) * frame.nx), sums, baseline);
    return leak === null ? [] : [{ lit: active[m] + 1, fibre: active[k] + 1, ...leak }];
  });
  const disagreeing = leaks.filter(({ share, error, model }) => Math.abs(share - model) > disagreeSigma * error);
  return {
    frame: frame.name,
    estimator,
    leaks,
    nDisagree: disagreeing.length,
    warnings: disagreeing.length === 0 ? [] : [disagreement(frame, disagreeing, leaks.length)],
  };
}

function disagreement({ name }: Frame, leaks: SeenLeak[], n: number): string {
  const pull = ({ share, error, model }: SeenLeak) => Math.abs(share - model) / error;
  const worst = leaks.reduce((a, b) => (pull(b) > pull(a) ? b : a));
  const percent = (value: number) => `${(100 * value).toPrecision(3)} %`;
  return `${name}: light at ${leaks.length} of ${n} dark fibres differs from the cross-talk matrix by over ${disagreeSigma} σ; worst, fibre ${worst.fibre} holds ${percent(worst.share)} ± ${percent(worst.error)} of fibre ${worst.lit}'s light where the profile has ${percent(worst.model)}, so do not trust the matrix that far.`;
}

/** Lit fibres as indices into `active`, from plain sums on the tramlines as they stand. */
function findLit(frame: Frame, tramlines: Tramlines, extraction: Extraction): number[] {
  const { active } = extraction.plan;
  const sums = takeSums(frame, tramlines, onlyLit(tramlines, []), extraction, "boxcar", []);
  const level = active.map((_, k) => typical(sums.raw.subarray(k * sums.nx, (k + 1) * sums.nx)));
  const noise = active.map((_, k) => Math.sqrt(typical(sums.variance.subarray(k * sums.nx, (k + 1) * sums.nx))));
  const brightest = Math.max(...level.filter((value) => !Number.isNaN(value)));
  const lit = active.flatMap((_, k) => (level[k] > litShare * brightest && level[k] > noise[k] ? [k] : []));
  if (lit.length === 0) {
    throw new RangeError(
      `${frame.name}: no fibre stands out of the noise, but a frame with one or a few lit fibres was expected; give such a frame or leave the option out.`,
    );
  }
  if (lit.length > mostLit * active.length) {
    throw new RangeError(
      `${frame.name}: ${lit.length} of ${active.length} fibres are lit, but a frame with one or a few lit fibres was expected; give such a frame or leave the option out.`,
    );
  }
  return lit;
}

function typical(values: Float64Array): number {
  const there = values.filter((value) => !Number.isNaN(value));
  return there.length > 0 ? median(there) : Number.NaN;
}

/** The tramlines where this frame's light sits, all fibres moved alike. */
async function placeLines(frame: Frame, tramlines: Tramlines, bare: Tramlines): Promise<Tramlines> {
  const shift = measureShift(await loadKernels(), frame, bare, fitBackground(frame, bare));
  return shift === null ? tramlines : shiftTramlines(tramlines, shift);
}

function onlyLit(tramlines: Tramlines, lit: number[]): Tramlines {
  const state = tramlines.state.map((_, k) => (lit.includes(k) ? "lit" : "dead") as "lit" | "dead");
  return { ...tramlines, state };
}

/** Pairs in which no other lit fibre reaches the dark one. */
function pairsOf(lit: number[], nFibre: number, reach: number): Pair[] {
  return lit.flatMap((m) => {
    const near = Array.from({ length: 2 * reach + 1 }, (_, i) => m - reach + i);
    const alone = (k: number) => lit.every((other) => other === m || Math.abs(other - k) > reach);
    return near.filter((k) => k !== m && k >= 0 && k < nFibre && alone(k)).map((k): Pair => [k, m]);
  });
}

/** `bare`: the tramlines without the dark fibres, between which the background shows. */
function takeSums(
  frame: Frame,
  tramlines: Tramlines,
  bare: Tramlines,
  extraction: Extraction,
  estimator: LoneEstimator,
  pairs: Pair[],
): Sums {
  const { plan, fit } = extraction;
  const { nx } = frame;
  const { width, shape, halfAperture } = fit.input;
  const input = extractionInput(frame, tramlines, plan, { background: false });
  const own = profileColumns(
    { ...input, width, ...(shape === undefined ? {} : { shape }) },
    fitBackground(frame, bare),
  );
  const science = modelColumns(fit);
  const empty = (n: number) => new Float64Array(n * nx).fill(Number.NaN);
  const sums: Sums = {
    nx,
    raw: empty(plan.active.length),
    variance: empty(plan.active.length),
    model: empty(pairs.length),
  };
  for (let x = 0; x < nx; x++) {
    const column = own(x);
    const weights = estimatorWeights(scienceWeighed(column, science(x), estimator), estimator, halfAperture);
    for (let k = 0; k < column.nFibre; k++) sumPixels(frame, column, weights, k, x, sums);
    pairs.forEach(([k, m], i) => {
      sums.model[i * nx + x] = sharedLight(column, weights, k, m) / sharedLight(column, weights, m, m);
    });
  }
  return sums;
}

/** The column with the variances that the science frame's light has on these tramlines. A boxcar does not ask for them. */
function scienceWeighed(column: Column, science: Column, estimator: LoneEstimator): Column {
  const moved: Column = { ...column, noise: science.noise, background: science.background };
  const dark = estimator === "boxcar";
  const flux = dark
    ? new Float64Array(science.nFibre)
    : solveNormal(normalEquations(science), science.nFibre, science.bandwidth);
  weighByModel(moved, lightOf(moved, flux));
  return moved;
}

/** (W d)_k in one column and its variance; left NaN when a pixel that counts is not good. The pixels' own counts stand in
 * for their variances: they weigh nothing here, and in sums over columns their noise averages out. */
function sumPixels(
  frame: Frame,
  column: Column,
  weights: Float64Array,
  k: number,
  x: number,
  { raw, variance }: Sums,
): void {
  const { nx, ny } = frame;
  let [sum, noise] = [0, 0];
  for (let i = 0; i < column.nWindow; i++) {
    const weight = weights[k * column.nWindow + i];
    if (weight === 0) continue;
    const y = column.start[k] + i;
    const at = y * nx + x;
    if (y < 0 || y >= ny || frame.mask[at] !== 0) return;
    const row = column.margin + y;
    const { fixed, inverseResponse, responseRelativeVariance } = column.noise;
    const light = frame.electrons[at];
    const photons = light * inverseResponse[row] + responseRelativeVariance[row] * light * light;
    sum += weight * (light - column.background[row]);
    noise += weight * weight * (fixed[row] + photons);
  }
  raw[k * nx + x] = sum;
  variance[k * nx + x] = noise;
}

/** Mean light per column of the dark fibres out of every lit one's reach, beyond their noise: squared, e⁻². */
function farLevel({ raw, variance, nx }: Sums, lit: number[], nFibre: number, reach: number): number {
  const squares: number[] = [];
  for (let k = 0; k < nFibre; k++) {
    if (lit.some((m) => Math.abs(m - k) <= 2 * reach + 2)) continue;
    const level = typical(raw.subarray(k * nx, (k + 1) * nx));
    const noise = typical(variance.subarray(k * nx, (k + 1) * nx)) / nx;
    if (!Number.isNaN(level)) squares.push(level * level - (Math.PI / 2) * noise);
  }
  return squares.length > 0 ? Math.max(0, squares.reduce((sum, value) => sum + value, 0) / squares.length) : 0;
}

/** Sums over the columns of a dark fibre k and a lit one m. `modelled`: [nx]. */
function leakBetween(k: number, m: number, modelled: Float64Array, { raw, variance, nx }: Sums, baseline: number) {
  const columns = Array.from({ length: nx }, (_, x) => x).filter(
    (x) => !Number.isNaN(raw[k * nx + x] + raw[m * nx + x]),
  );
  if (columns.length === 0) return null;
  const common = median(columns.map((x) => raw[k * nx + x] / raw[m * nx + x]));
  const kept = columns.filter((x) => {
    const expected = Math.abs(common * raw[m * nx + x]);
    const off = Math.abs(raw[k * nx + x] - common * raw[m * nx + x]);
    return off <= clipSigma * Math.sqrt(Math.max(variance[k * nx + x], 0)) + expected / 2;
  });
  let [here, there, noise, model] = [0, 0, 0, 0];
  for (const x of kept) {
    here += raw[k * nx + x];
    there += raw[m * nx + x];
    noise += variance[k * nx + x];
    model += modelled[x] * raw[m * nx + x];
  }
  const error = Math.sqrt(Math.max(noise, 0) + baseline * kept.length * kept.length) / there;
  return { share: here / there, error, model: model / there };
}
