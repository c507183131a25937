/** What has grown since columns were extracted, taken into account; the readable twin of assembly/grown.ts. */
import { MaskBit } from "./bits.js";
import { callRow, innerStretch, rowsOf, sorted, stretchOf } from "./chunks.js";
import type { Column } from "./column.js";
import { loadColumn, marginRows } from "./columns.js";
import { noteResidue, weighByModel } from "./cosmic.js";
import type { ExtractionInput, ExtractionOutput } from "./extraction.js";
import { addLight } from "./light.js";
import { type BlockProfiles, blockProfiles } from "./profile.js";
import { close, openFit, settleStretch } from "./rounds.js";
import { writeFit } from "./spectra.js";

/** Takes into account, in columns x0 … x1 − 1 that were extracted before, what has grown in `input.rejected` since. */
export function settleGrownColumns(input: ExtractionInput, output: ExtractionOutput, x0: number, x1: number): void {
  for (let first = x0 - (x0 % input.blockColumns); first < x1; first += input.blockColumns) {
    const end = Math.min(first + input.blockColumns, x1);
    let block: BlockProfiles | undefined;
    for (let x = Math.max(first, x0); x < end; x++) {
      const rows = grownRows(input, x);
      if (rows.length === 0) continue;
      block ??= blockProfiles(input, first);
      const called = new Set<number>();
      const margin = marginRows(input);
      const column = loadColumn(input, block, x - first, x);
      for (const y of rows) callRow(column, margin + y, called);
      for (const chunk of sorted(called)) settleGrown(input, column, output, x, chunk);
    }
  }
}

/** One chunk of a column once more, from the fluxes that the first look left, without further rejection. */
function settleGrown(input: ExtractionInput, column: Column, output: ExtractionOutput, x: number, chunk: number): void {
  const fit = openFit({ ...input, kappa: 0 }, column);
  const stretch = stretchOf(column, chunk);
  const from = Math.max(stretch[0] - column.bandwidth, 0);
  const to = Math.min(stretch[1] + column.bandwidth, column.nFibre);
  const rows = rowsOf(column, [from, to]);
  let [w0, w1] = [from, to];
  while (w0 > 0 && rowsOf(column, [w0 - 1, w0])[1] + column.wing > rows[0]) w0--;
  while (w1 < column.nFibre && rowsOf(column, [w1, w1 + 1])[0] - column.wing < rows[1]) w1++;
  for (let k = w0; k < w1; k++) fit.flux[k] = output.fitFlux![k * input.nx + x];
  addLight(column, fit.light, fit.flux, w0, w1, { windows: true, wings: true });
  weighByModel(column, fit.light, rows);
  for (let round = 0; round < input.maxRounds; round++) {
    const called = new Set<number>();
    settleStretch(fit, stretch, from, to, called);
    if (round + 1 >= input.minRounds && called.size === 0) break;
  }
  noteResidue(column, fit.light, fit.flux, rowsOf(column, stretch), fit.thresholds, fit.residue);
  const inner = innerStretch(column, chunk);
  writeFit(fit, output, input.nx, x, inner);
  close(input, fit, output, x, stretch, inner);
}

function grownRows({ nx, ny, rejected }: ExtractionInput, x: number): number[] {
  const rows: number[] = [];
  for (let y = 0; y < ny; y++) if (rejected[y * nx + x] & MaskBit.grown) rows.push(y);
  return rows;
}
