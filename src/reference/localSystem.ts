/** Normal equations of one column's pixels in the local unknowns of its fibres: flux, and flux times shift, and flux times change
 * of width. Neighbours' windows overlap, so that the matrix is banded. */
import type { ColumnProfiles } from "./shapeProfiles.js";

/** `nPar` unknowns a fibre. */
export interface LocalSystem {
  nPar: number;
  halfBandwidth: number;
  /** (nFibre·nPar) × (halfBandwidth+1), as banded.ts lays it out. */
  band: Float64Array;
  rhs: Float64Array;
}

/** Derivatives of a column's pixels by the local unknowns: [nFibre × nPar × n], 0 beyond the local reach and off the frame. */
export function localDesign(profiles: ColumnProfiles, flux: Float64Array, nPar: number): Float64Array {
  const { nFibre, n, margin, first, ny } = profiles;
  const design = new Float64Array(nFibre * nPar * n);
  for (let k = 0; k < nFibre; k++) {
    const from = Math.max(margin, -first[k]);
    const to = Math.min(n - margin, ny - first[k]);
    const at = k * nPar * n;
    for (let i = from; i < to; i++) {
      design[at + i] = profiles.weights[k * n + i];
      if (nPar > 1) design[at + n + i] = flux[k] * profiles.byCentre[k * n + i];
      if (nPar > 2) design[at + 2 * n + i] = flux[k] * profiles.byWidth[k * n + i];
    }
  }
  return design;
}

/** Normal equations of the column's residuals [ny] in the fibres' local unknowns. `nPar`: 1 flux, 2 and shift, 3 and width. */
export function localSystem(
  profiles: ColumnProfiles,
  design: Float64Array,
  residual: Float64Array,
  inverseVariance: Float64Array,
  nPar: number,
): LocalSystem {
  const { nFibre, n, margin, first, ny } = profiles;
  const neighbours = overlapping(profiles);
  const halfBandwidth = nPar * (neighbours + 1) - 1;
  const row = halfBandwidth + 1;
  const band = new Float64Array(nFibre * nPar * row);
  const rhs = new Float64Array(nFibre * nPar);
  const weighted = new Float64Array(n);
  for (let k = 0; k < nFibre; k++) {
    const low = Math.max(margin, -first[k]);
    const high = Math.min(n - margin, ny - first[k]);
    for (let p = 0; p < nPar; p++) {
      const own = (k * nPar + p) * n;
      let sum = 0;
      for (let i = low; i < high; i++) {
        weighted[i] = design[own + i] * inverseVariance[first[k] + i];
        sum += weighted[i] * residual[first[k] + i];
      }
      rhs[k * nPar + p] = sum;
      for (let m = Math.max(0, k - neighbours); m <= k; m++) {
        const ahead = first[k] - first[m];
        const to = Math.min(high, n - margin - ahead);
        for (let q = 0; q < nPar && m * nPar + q <= k * nPar + p; q++) {
          const other = (m * nPar + q) * n + ahead;
          let product = 0;
          for (let i = low; i < to; i++) product += weighted[i] * design[other + i];
          band[(k * nPar + p) * row + (k - m) * nPar + p - q] = product;
        }
      }
    }
  }
  return { nPar, halfBandwidth, band, rhs };
}

/** How many fibres further the last one stands whose local window meets a fibre's own. */
export function overlapping({
  first,
  n,
  margin,
  nFibre,
}: Pick<ColumnProfiles, "first" | "n" | "margin" | "nFibre">): number {
  let most = 0;
  for (let k = 0; k < nFibre; k++) {
    while (k - most - 1 >= 0 && first[k] - first[k - most - 1] < n - 2 * margin) most++;
  }
  return most;
}
