/** Sums over the fibres of a target, with error bars that know of the neighbours' covariance.
 *
 *     F = Σ f_k,   var F = Σ var f_k + 2·Σ cov(f_k, f_k+1) over neighbours that both belong
 *
 * Light that joint extraction, or a cross-talk correction, moves between neighbours makes their errors anticorrelated: it
 * drops out of the sum, and variances added alone are too large. Left without correction, neighbours share pixels and
 * the sum of variances is too small. What covariances beyond the next slit position add is neglected here, since a product
 * does not hold them; `neglectedShare` measures it on the frame from the whole of gᵀ·cov·g. */
import { factorBand, solveBand } from "../reference/banded.js";
import { boxcar } from "../reference/boxcar.js";
import type { Column } from "../reference/column.js";
import { crosstalkSystem, type RawEstimate } from "../reference/crosstalk.js";
import { normalEquations } from "../reference/joint.js";
import { optimal } from "../reference/optimal.js";
import { sampledColumns } from "./crosstalkMatrix.js";
import type { Extraction } from "./extract.js";
import { modelColumns } from "./modelColumn.js";
import { Flag, type Spectra } from "./spectra.js";

/** A target's name and its slit positions, from 1. */
export interface Target {
  name: string;
  fibres: number[];
}

/** Images are [nTarget × nx], index = target · nx + x. */
export interface TargetSpectra {
  targets: Target[];
  nx: number;
  /** Slit positions that count: without the dead ones. */
  used: number[][];
  /** e⁻; NaN where one of the fibres has no value. */
  flux: Float64Array;
  /** e⁻² */
  variance: Float64Array;
  /** All bits of the fibres that count; dead where none does. */
  flags: Int32Array;
}

/** Sums the fibres of each target. Dead fibres bring nothing and are left out; a column in which any other fibre has no
 * value has none for the target either, since a sum over fewer fibres is another quantity.
 * @throws RangeError when a target names a fibre twice or one outside the slit. */
export function sumFibres(spectra: Spectra, targets: Target[]): TargetSpectra {
  const { nx } = spectra;
  for (const target of targets) checkTarget(target, spectra.nFibre);
  const isDead = (fibre: number) => spectra.flags.subarray((fibre - 1) * nx, fibre * nx).every((f) => f & Flag.dead);
  const used = targets.map(({ fibres }) => fibres.filter((fibre) => !isDead(fibre)).sort((a, b) => a - b));
  const n = targets.length * nx;
  const sums: TargetSpectra = {
    targets,
    nx,
    used,
    flux: new Float64Array(n).fill(Number.NaN),
    variance: new Float64Array(n).fill(Number.NaN),
    flags: new Int32Array(n),
  };
  used.forEach((fibres, i) => {
    if (fibres.length === 0) sums.flags.fill(Flag.dead, i * nx, (i + 1) * nx);
    else for (let x = 0; x < nx; x++) sumColumn(spectra, fibres, x, sums, i * nx + x);
  });
  return sums;
}

function sumColumn(spectra: Spectra, fibres: number[], x: number, sums: TargetSpectra, to: number): void {
  let [flux, variance, flags] = [0, 0, 0];
  fibres.forEach((fibre, i) => {
    const at = (fibre - 1) * spectra.nx + x;
    flux += spectra.flux[at];
    variance += spectra.variance[at];
    if (fibres[i + 1] === fibre + 1) variance += 2 * spectra.neighbourCovariance[at];
    flags |= spectra.flags[at];
  });
  sums.flux[to] = flux;
  sums.variance[to] = Number.isNaN(flux) ? Number.NaN : variance;
  sums.flags[to] = flags;
}

function checkTarget({ name, fibres }: Target, nFibre: number): void {
  const beyond = fibres.find((fibre) => !Number.isInteger(fibre) || fibre < 1 || fibre > nFibre);
  if (beyond !== undefined) {
    throw new RangeError(`Target '${name}' names slit position ${beyond}, but there are 1 to ${nFibre}.`);
  }
  const twice = fibres.find((fibre, i) => fibres.indexOf(fibre) < i);
  if (twice !== undefined) throw new RangeError(`Target '${name}' names slit position ${twice} twice; name it once.`);
}

/** Share of each target's variance that the sum over next neighbours leaves out, the largest in size over sampled columns:
 * (gᵀ·cov·g − variance) / gᵀ·cov·g with the model's variances; positive where `sumFibres` says too little. */
export function neglectedShare(extraction: Extraction, { used }: TargetSpectra): Float64Array {
  const { fit, plan, spectra } = extraction;
  const columnAt = modelColumns(fit);
  const rows = new Map(plan.active.map((k, i) => [k + 1, i]));
  const worst = new Float64Array(used.length);
  for (const x of sampledColumns(spectra.nx)) {
    const column = columnAt(x);
    const covariance = columnCovariance(column, extraction);
    used.forEach((fibres, i) => {
      const members = fibres.map((fibre) => rows.get(fibre)!);
      const exact = variance(covariance, members, () => true);
      const near = variance(covariance, members, (a, b) => Math.abs(fibres[a] - fibres[b]) <= 1);
      const share = (exact - near) / exact;
      if (exact > 0 && Math.abs(share) > Math.abs(worst[i])) worst[i] = share;
    });
  }
  return worst;
}

/** cov[·][m] of one column for one m, e⁻²: [nFibre]. */
type CovarianceColumn = (m: number) => Float64Array;

function variance(covariance: CovarianceColumn, members: number[], counts: (a: number, b: number) => boolean): number {
  let sum = 0;
  members.forEach((m, b) => {
    const column = covariance(m);
    members.forEach((k, a) => {
      if (counts(a, b)) sum += column[k];
    });
  });
  return sum;
}

/** Columns of the covariance that the extraction's method leaves, each by one solution of its banded system. */
function columnCovariance(column: Column, { fit, spectra }: Extraction): CovarianceColumn {
  const { nFibre, bandwidth } = column;
  const normal = normalEquations(column);
  if (spectra.method === "joint") {
    factorBand(normal.band, nFibre, bandwidth);
    return remembered((m) => {
      const unit = new Float64Array(nFibre);
      unit[m] = 1;
      solveBand(normal.band, nFibre, bandwidth, unit);
      return unit;
    });
  }
  const raw =
    spectra.method === "optimal" ? optimal(normal, nFibre, bandwidth) : boxcar(column, fit.input.halfAperture);
  return remembered(spectra.crosstalkCorrected ? correctedCovariance(raw, column) : rawCovariance(raw, column));
}

/** C⁻¹VC⁻ᵀ: minus the x-block of the inverse of the interleaved system (src/reference/crosstalk.ts). */
function correctedCovariance(raw: RawEstimate, { nFibre, bandwidth }: Column): CovarianceColumn {
  const half = 2 * bandwidth + 1;
  const system = crosstalkSystem(raw, nFibre, bandwidth);
  factorBand(system, 2 * nFibre, half);
  return (m) => {
    const unit = new Float64Array(2 * nFibre);
    unit[2 * m + 1] = 1;
    solveBand(system, 2 * nFibre, half, unit);
    return Float64Array.from({ length: nFibre }, (_, k) => -unit[2 * k + 1]);
  };
}

/** V[k][m] / (C[k][k]·C[m][m]). */
function rawCovariance({ covariance, crosstalk }: RawEstimate, { nFibre, bandwidth }: Column): CovarianceColumn {
  const own = (k: number) => crosstalk[k * (2 * bandwidth + 1) + bandwidth];
  return (m) =>
    Float64Array.from({ length: nFibre }, (_, k) => {
      const distance = Math.abs(k - m);
      if (distance > bandwidth || !(own(k) > 0) || !(own(m) > 0)) return 0;
      return covariance[Math.max(k, m) * (bandwidth + 1) + distance] / (own(k) * own(m));
    });
}

function remembered(column: CovarianceColumn): CovarianceColumn {
  const known = new Map<number, Float64Array>();
  return (m) => {
    if (!known.has(m)) known.set(m, column(m));
    return known.get(m)!;
  };
}
