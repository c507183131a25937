/** Extraction of a stretch of columns: the readable twin of assembly/extract.ts, in double precision.
 *
 * Each column stands alone. Weights start from the data's own noise, which no cosmic ray can fool; then model,
 * rejection and variance follow each other. After the first rounds only the fibres that still move are fitted again, until
 * nothing changes, and the method's estimate closes the column. */
import { callRow, rowsOf, type Stretch, sorted, stretchOf } from "./chunks.js";
import type { Column } from "./column.js";
import { loadColumn } from "./columns.js";
import { noteResidue, weighByModel } from "./cosmic.js";
import type { ExtractionInput, ExtractionOutput } from "./extraction.js";
import { normalEquations, solveNormal } from "./joint.js";
import { addLight } from "./light.js";
import { blockProfiles } from "./profile.js";
import { close, movedBy, openFit, rejectWorst, settleStretch, takeSolution } from "./rounds.js";
import { writeFit, writeRejected } from "./spectra.js";
import { pixelVariance } from "./variance.js";

export type { ExtractionInput, ExtractionOutput, ExtractionStart, Method, SmoothBackground } from "./extraction.js";

/** Extracts columns x0 … x1 − 1 into `output`. */
export function extractColumns(input: ExtractionInput, output: ExtractionOutput, x0: number, x1: number): void {
  for (let first = x0 - (x0 % input.blockColumns); first < x1; first += input.blockColumns) {
    const block = blockProfiles(input, first);
    const end = Math.min(first + input.blockColumns, x1);
    for (let x = Math.max(first, x0); x < end; x++) {
      extractColumn(input, loadColumn(input, block, x - first, x), output, x);
    }
  }
}

/** One column: settle variances and rejections, estimate, write out. */
function extractColumn(input: ExtractionInput, column: Column, output: ExtractionOutput, x: number): void {
  const { nFibre, bandwidth, margin, nRow } = column;
  const fit = openFit(input, column);
  const everyone: Stretch = [0, nFibre];
  const rows: [number, number] = [margin, nRow - margin];
  const rejecting = input.kappa > 0;
  let called = new Set<number>();
  for (let row = 0; row < nRow; row++) {
    column.inverseVariance[row] = weightByData(column, row);
    column.net[row] = column.light[row];
  }
  fit.normal = normalEquations(column);
  for (let round = 0; ; round++) {
    const last = round === input.minRounds;
    takeSolution(fit, everyone, solveNormal(fit.normal, nFibre, bandwidth), last ? called : undefined);
    // In the last round most wings would change by a hundredth of a hundredth; but not where a hit has just gone.
    const wings = !last || round === 0;
    if (!wings) addLight(column, fit.light, movedBy(fit), 0, nFibre, { windows: false, wings: true });
    fit.light = { model: new Float64Array(nRow), wings: wings ? new Float64Array(nRow) : fit.light.wings };
    addLight(column, fit.light, fit.flux, 0, nFibre, { windows: true, wings });
    if (last) break;
    if (rejecting) rejectWorst(fit, rows);
    weighByModel(column, fit.light, rows);
    fit.normal = normalEquations(column);
  }
  noteResidue(column, fit.light, fit.flux, rows, fit.thresholds, fit.residue);
  if (rejecting && input.minRounds < input.maxRounds) {
    for (const row of rejectWorst(fit, rows)) callRow(column, row, called);
  }
  for (let round = input.minRounds; round < input.maxRounds && called.size > 0; round++) {
    const chunks = sorted(called);
    called = new Set();
    for (const chunk of chunks) {
      const stretch = stretchOf(column, chunk);
      const own = rowsOf(column, stretch);
      settleStretch(fit, stretch, 0, nFibre, called);
      noteResidue(column, fit.light, fit.flux, own, fit.thresholds, fit.residue);
      if (!rejecting || round + 1 === input.maxRounds) continue;
      for (const row of rejectWorst(fit, own)) callRow(column, row, called);
    }
  }
  if (rejecting) writeRejected(input, fit, x);
  writeFit(fit, output, input.nx, x, everyone);
  close(input, fit, output, x, everyone, everyone);
}

function weightByData(column: Column, row: number): number {
  if (column.bits[row] !== 0) return 0;
  return 1 / pixelVariance(column.noise, row, column.light[row] + column.background[row]);
}
