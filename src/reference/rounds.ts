/** What a round of an extraction is made of, for all fibres of a column or for a stretch of them whose neighbours stand
 * still; the readable twin of assembly/rounds.ts. */
import { boxcar } from "./boxcar.js";
import { chunkFibres, rowsOf, type Stretch } from "./chunks.js";
import type { Column } from "./column.js";
import { noResidue, type Residue, reject, type Thresholds, weighByModel, worstOutliers } from "./cosmic.js";
import { solveCrosstalk, withoutCrosstalk } from "./crosstalk.js";
import type { ExtractionInput, ExtractionOutput } from "./extraction.js";
import { columnFlags } from "./flags.js";
import { type Estimate, fillNormal, jointCovariance, type Normal, noNormal, solveStretch } from "./joint.js";
import { addLight, type ColumnLight, noLight } from "./light.js";
import { optimal } from "./optimal.js";
import { writeColumn } from "./spectra.js";

/** Change of a flux, in σ, up to which it has settled. */
const settledSigma = 0.1;

/** A column at work. */
export interface Fit {
  column: Column;
  thresholds: Thresholds;
  normal: Normal;
  flux: Float64Array;
  lastChange: Float64Array;
  light: ColumnLight;
  residue: Residue;
}

export function openFit({ profileError, kappa, growKappa }: ExtractionInput, column: Column): Fit {
  return {
    column,
    thresholds: { profileError, kappa, growKappa },
    normal: noNormal(column.nFibre, column.bandwidth),
    flux: new Float64Array(column.nFibre),
    lastChange: new Float64Array(column.nFibre),
    light: noLight(column),
    residue: noResidue(column),
  };
}

/** Another round for a stretch of fibres while the others stand still: variances, fit, light. Of the fibres only
 * `lowest` … `highest` − 1 are known. */
export function settleStretch(fit: Fit, stretch: Stretch, lowest: number, highest: number, called: Set<number>): void {
  const { column, normal, light } = fit;
  const { bandwidth } = column;
  const [k0, k1] = stretch;
  weighByModel(column, light, rowsOf(column, stretch));
  // Every fibre that sees one of these rows, so that the equations always belong to the variances as they are.
  fillNormal(column, normal, Math.max(k0 - bandwidth, lowest), Math.min(k1 + bandwidth, highest), lowest);
  const before = fit.flux.slice();
  takeSolution(fit, stretch, solveStretch(normal, bandwidth, fit.flux, stretch, highest), called);
  const change = fit.flux.map((flux, k) => flux - before[k]);
  addLight(column, light, change, k0, k1, { windows: true, wings: true });
}

/** New fluxes of a stretch; by how much each changed is kept, and who moved by more than a tenth of the σ that it would have
 * alone, 1/√M[k][k], is called. */
export function takeSolution(
  fit: Fit,
  [k0, k1]: Stretch,
  solution: Float64Array,
  called: Set<number> | undefined,
): void {
  const { column, normal, flux, lastChange } = fit;
  for (let k = k0; k < k1; k++) {
    const change = solution[k - k0] - flux[k];
    flux[k] = solution[k - k0];
    lastChange[k] = change;
    const moved = change * change * normal.band[k * (column.bandwidth + 1)] > settledSigma * settledSigma;
    if (moved) called?.add(Math.floor(k / chunkFibres));
  }
}

/** By how much each flux just changed, e⁻; 0 for those that have settled. */
export function movedBy({ column, normal, lastChange }: Fit): Float64Array {
  const limit = settledSigma * settledSigma;
  return lastChange.map((change, k) =>
    change * change * normal.band[k * (column.bandwidth + 1)] > limit ? change : 0,
  );
}

/** Takes the worst outliers of these rows out of the fit; returns them. */
export function rejectWorst({ column, light, flux, thresholds }: Fit, rows: [number, number]) {
  const outliers = worstOutliers(column, light, flux, thresholds, rows);
  reject(column, outliers);
  return outliers;
}

/** The method's estimate of the fibres of `known`, flags, and those of `written` into the images. */
export function close(
  input: ExtractionInput,
  fit: Fit,
  output: ExtractionOutput,
  x: number,
  known: Stretch,
  written: Stretch,
): void {
  const { column } = fit;
  const estimate = estimateBy(input, fit, known);
  const flags = columnFlags(column, fit.lastChange, estimate.variance, (k) => isSeen(input, k, x), known);
  writeColumn(column, estimate, flags, fit.residue, output, input.nx, x, written);
}

function isSeen({ seen }: ExtractionInput, k: number, x: number): boolean {
  return x >= seen[2 * k] && x <= seen[2 * k + 1];
}

function estimateBy(input: ExtractionInput, { column, normal, flux }: Fit, [k0, k1]: Stretch): Estimate {
  const part = stretchColumn(column, [k0, k1]);
  const own = stretchNormal(normal, column.bandwidth, [k0, k1]);
  const { nFibre, bandwidth } = part;
  const estimate = () => {
    if (input.method === "joint") return jointCovariance(own, flux.slice(k0, k1), nFibre, bandwidth);
    const raw = input.method === "optimal" ? optimal(own, nFibre, bandwidth) : boxcar(part, input.halfAperture);
    return (input.crosstalk ? solveCrosstalk : withoutCrosstalk)(raw, nFibre, bandwidth);
  };
  return placed(estimate(), k0, column.nFibre);
}

/** The column as if it held no fibres but those of the stretch. */
function stretchColumn(column: Column, [k0, k1]: Stretch): Column {
  if (k1 - k0 === column.nFibre) return column;
  const { nWindow, wing } = column;
  return {
    ...column,
    nFibre: k1 - k0,
    start: column.start.subarray(k0, k1),
    centre: column.centre.subarray(k0, k1),
    weights: column.weights.subarray(k0 * nWindow, k1 * nWindow),
    wings: column.wings.subarray(2 * k0 * wing, 2 * k1 * wing),
  };
}

function stretchNormal({ band, rhs }: Normal, bandwidth: number, [k0, k1]: Stretch): Normal {
  return { band: band.slice(k0 * (bandwidth + 1), k1 * (bandwidth + 1)), rhs: rhs.slice(k0, k1) };
}

/** An estimate of a stretch at its place among all fibres; NaN for the others. */
function placed({ flux, variance, covarianceBelow }: Estimate, k0: number, nFibre: number): Estimate {
  const place = (own: Float64Array) => {
    const all = new Float64Array(nFibre).fill(Number.NaN);
    all.set(own, k0);
    return all;
  };
  return { flux: place(flux), variance: place(variance), covarianceBelow: place(covarianceBelow) };
}
