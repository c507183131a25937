/** Columns in: pixels of the frame as one column with everything that the estimators need; the readable twin of
 * assembly/columns.ts. */
import { MaskBit } from "./bits.js";
import type { Column } from "./column.js";
import type { ExtractionInput, ExtractionStart, SmoothBackground } from "./extraction.js";
import { legendreArgument, legendreValue } from "./legendre.js";
import { type BlockProfiles, columnWeights, columnWings, nodeShares, wingShares } from "./profile.js";

/** Rows that a column has beyond each end of the frame: a window and its wing may lie there, and two rows more are looked at. */
export function marginRows({ halfWindow, wing }: ExtractionStart): number {
  return 2 * halfWindow + 1 + wing + 2;
}

/** Column `offset` of a block before any pixel is read: profiles in place, nothing good. */
export function emptyColumn(input: ExtractionStart, block: BlockProfiles, offset: number): Column {
  const nWindow = 2 * input.halfWindow + 1;
  const margin = marginRows(input);
  const nRow = input.ny + 2 * margin;
  const zeros = () => new Float64Array(nRow);
  const shares = nodeShares(input.blockColumns, offset);
  const light = zeros();
  return {
    nRow,
    margin,
    nFibre: input.nFibre,
    nWindow,
    bandwidth: input.bandwidth,
    start: block.start,
    weights: columnWeights(block, nWindow, shares),
    wing: input.wing,
    wings: columnWings(block, input.wing, wingShares(input.blockColumns, offset)),
    centre: Float64Array.from({ length: input.nFibre }, (_, k) =>
      shares.reduce((sum, share, node) => sum + share * block.centre[block.nNode * k + node], 0),
    ),
    light,
    background: zeros(),
    noise: { fixed: zeros().fill(1), inverseResponse: zeros(), responseRelativeVariance: zeros() },
    bits: new Uint8Array(nRow).fill(MaskBit.missing),
    inverseVariance: zeros(),
    net: light,
  };
}

export function loadColumn(input: ExtractionInput, block: BlockProfiles, offset: number, x: number): Column {
  const column = emptyColumn(input, block, offset);
  column.net = new Float64Array(column.nRow);
  const series = backgroundSeries(input.background, legendreArgument(x, input.nx));
  for (let y = 0; y < input.ny; y++) loadPixel(input, column, series, x, y);
  return column;
}

function loadPixel(input: ExtractionInput, column: Column, series: Float64Array, x: number, y: number): void {
  const { noise, nx } = input;
  const at = y * nx + x;
  const row = column.margin + y;
  const unmarked = input.mask[at] === 0 && !Number.isFinite(input.electrons[at]);
  const masked = unmarked ? MaskBit.missing : input.mask[at];
  column.bits[row] = masked | (input.rejected[at] & (MaskBit.cosmic | MaskBit.grown));
  column.background[row] = legendreValue(series, legendreArgument(y, input.ny));
  column.light[row] = column.bits[row] === 0 ? input.electrons[at] - column.background[row] : 0;
  column.noise.fixed[row] = noise.fixedVarianceImage?.[at] ?? noise.fixedVariance[noise.bandOfRow[y] * nx + x];
  column.noise.inverseResponse[row] = noise.inverseResponse?.[at] ?? 1;
  column.noise.responseRelativeVariance[row] = noise.responseRelativeVariance?.[at] ?? 0;
}

/** Coefficients of b(x, ·) in P_j(y) at one x: [nY]. */
export function backgroundSeries({ nX, nY, coefficients }: SmoothBackground, t: number): Float64Array {
  const column = new Float64Array(nX);
  return Float64Array.from({ length: nY }, (_, j) => {
    for (let i = 0; i < nX; i++) column[i] = coefficients[i * nY + j];
    return legendreValue(column, t);
  });
}
