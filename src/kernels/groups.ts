/** Door to assembly/groups.ts: the frame goes through kernel memory some rows at a time, with the rows beside them. */
import type { ColumnRange, GroupedPixels, GroupMean } from "../reference/groups.js";
import { GroupWord } from "./groups-words.js";
import type { Kernels, Workbench } from "./module.js";

/** Pixels that are worked on at once. */
const CHUNK_PIXELS = 2 ** 20;
/** Numbers that kernels may read past the last one. */
const MARGIN = 4;

/** Means of groups of columns, in the order given; see src/reference/groups.ts.
 * @param chunkPixels how many pixels lie in kernel memory at once, roughly.
 * @throws RangeError for a range outside the frame, or empty. */
export function groupColumns(
  kernels: Kernels,
  pixels: GroupedPixels,
  ranges: ColumnRange[],
  chunkPixels = CHUNK_PIXELS,
): GroupMean[] {
  const wrong = ranges.find(({ from, to }) => !(from >= 0 && from < to && to <= pixels.nx));
  if (wrong !== undefined) {
    throw new RangeError(`Columns ${wrong.from} to ${wrong.to} of ${pixels.nx}; a group needs one column or more.`);
  }
  if (ranges.length === 0) return [];
  const chunk = new Chunk(kernels, pixels, ranges, chunkPixels);
  const means = ranges.map(() => ({
    mean: new Float64Array(pixels.ny),
    count: new Uint16Array(pixels.ny),
    fixedVariance: new Float64Array(pixels.ny),
    variancePerElectron: new Float64Array(pixels.ny),
  }));
  for (let y = 0; y < pixels.ny; y += chunk.nInner) chunk.run(y, means);
  return means;
}

/** Rows of the columns that the groups span: one row before, `nInner`, and one or more after. */
class Chunk {
  readonly nInner: number;
  private readonly nRow: number;
  private readonly first: number;
  private readonly span: number;
  private readonly bench: Workbench;
  private readonly images: { from: Float32Array | Uint8Array; to: Float32Array | Uint8Array }[] = [];
  private readonly fixedRow: Int32Array;
  private readonly out: Record<"mean" | "fixedVariance" | "variancePerElectron", Float64Array> & { count: Int32Array };
  private readonly jobs: number[];

  constructor(
    kernels: Kernels,
    private readonly pixels: GroupedPixels,
    ranges: ColumnRange[],
    chunkPixels: number,
  ) {
    const { nx, ny, electrons, nUsed, noise } = pixels;
    const nGroup = ranges.length;
    this.first = ranges.reduce((first, { from }) => Math.min(first, from), nx);
    this.span = ranges.reduce((last, { to }) => Math.max(last, to), 0) - this.first;
    const nInner = Math.min(ny, Math.max(16, Math.floor(chunkPixels / this.span)));
    this.nRow = 4 * Math.ceil((nInner + 2) / 4);
    this.nInner = this.nRow - 2;
    const nPixel = this.nRow * this.span + MARGIN;
    const nBand = noise.fixedVariance.length / nx;
    const widths = ranges.map(({ from, to }) => to - from);
    const networks = new Map(widths.map((width) => [width, sortingNetwork(width)]));
    const nNetwork = [...networks.values()].reduce((sum, network) => sum + network.length, 0);
    const scratch = 4 * (Math.max(...widths) + 3);
    const nWord = 4 * nPixel + nBand * this.span + nNetwork + 4 * nGroup + 9 * nGroup * this.nRow + this.nRow + MARGIN;
    const nBytes = 4 * nWord + nPixel + 4 * kernels.nThread * (scratch + GroupWord.count);
    this.bench = kernels.workbench(nBytes, 20 + networks.size + 2 * kernels.nThread);
    const { bench } = this;

    const placed = new Map(Array.from(networks, ([width, network]) => [width, this.place(network)]));
    this.fixedRow = bench.int32(this.nRow);
    const numbers = () => bench.float64(nGroup * this.nRow);
    this.out = {
      mean: numbers(),
      count: bench.int32(nGroup * this.nRow),
      fixedVariance: numbers(),
      variancePerElectron: numbers(),
    };
    const words = new Int32Array(GroupWord.count);
    words[GroupWord.nRow] = this.nRow;
    words[GroupWord.stride] = this.span;
    words[GroupWord.nGroup] = nGroup;
    words[GroupWord.electrons] = this.follow(electrons);
    words[GroupWord.nUsed] = this.follow(nUsed);
    words[GroupWord.isSingle] = pixels.nFrame === 1 ? 1 : 0;
    words[GroupWord.fixedRow] = this.fixedRow.byteOffset;
    words[GroupWord.fixedVariance] = this.follow(noise.fixedVarianceImage) || this.placeBands(nBand);
    words[GroupWord.inverseResponse] = this.follow(noise.inverseResponse);
    words[GroupWord.responseRelativeVariance] = this.follow(noise.responseRelativeVariance);
    words[GroupWord.from] = this.place(ranges.map(({ from }) => from - this.first));
    words[GroupWord.width] = this.place(widths);
    words[GroupWord.network] = this.place(widths.map((width) => placed.get(width)!));
    words[GroupWord.nComparator] = this.place(widths.map((width) => networks.get(width)!.length / 2));
    words[GroupWord.median] = numbers().byteOffset;
    words[GroupWord.mean] = this.out.mean.byteOffset;
    words[GroupWord.nKept] = this.out.count.byteOffset;
    words[GroupWord.meanFixed] = this.out.fixedVariance.byteOffset;
    words[GroupWord.meanPerElectron] = this.out.variancePerElectron.byteOffset;
    this.jobs = Array.from({ length: bench.nThread }, () => {
      words[GroupWord.scratch] = bench.float32(scratch).byteOffset;
      return this.place(words);
    });
  }

  /** Rows `y0` … `y0 + nInner − 1` of all groups. */
  run(y0: number, means: GroupMean[]): void {
    const { ny, noise } = this.pixels;
    const nHere = Math.min(this.nInner, ny - y0);
    for (const image of this.images) this.copyRows(image, y0, nHere);
    for (let row = 0; row < nHere + 2; row++) {
      this.fixedRow[row] = noise.fixedVarianceImage ? row : noise.bandOfRow[this.rowOfFrame(y0, row)];
    }
    const nTile = Math.ceil((nHere + 2) / 4);
    this.bench.share("groupMedians", this.jobs, nTile);
    this.bench.share("groupMeans", this.jobs, nTile);
    means.forEach((group, g) => {
      const from = g * this.nRow + 1;
      group.mean.set(this.out.mean.subarray(from, from + nHere), y0);
      group.count.set(this.out.count.subarray(from, from + nHere), y0);
      group.fixedVariance.set(this.out.fixedVariance.subarray(from, from + nHere), y0);
      group.variancePerElectron.set(this.out.variancePerElectron.subarray(from, from + nHere), y0);
    });
  }

  /** The frame's row that lies in row `row` here; its first and last one stand for those beyond. */
  private rowOfFrame(y0: number, row: number): number {
    return Math.max(0, Math.min(this.pixels.ny - 1, y0 + row - 1));
  }

  private copyRows({ from, to }: Chunk["images"][number], y0: number, nHere: number): void {
    const { nx } = this.pixels;
    const nCopied = this.span === nx ? nHere : 1;
    const copy = (row: number, n: number) => {
      const at = this.rowOfFrame(y0, row) * nx + this.first;
      to.set(from.subarray(at, at + (n - 1) * nx + this.span), row * this.span);
    };
    copy(0, 1);
    for (let row = 1; row <= nHere; row += nCopied) copy(row, nCopied);
    copy(nHere + 1, 1);
  }

  /** Room for an image whose rows are copied; its pointer, 0 when there is none. */
  private follow(from: Float32Array | Uint8Array | undefined): number {
    if (from === undefined) return 0;
    const nPixel = this.nRow * this.span + MARGIN;
    const to = from instanceof Uint8Array ? this.bench.uint8(nPixel) : this.bench.float32(nPixel);
    this.images.push({ from, to });
    return to.byteOffset;
  }

  private placeBands(nBand: number): number {
    const { nx, noise } = this.pixels;
    const bands = this.bench.float32(nBand * this.span + MARGIN);
    for (let band = 0; band < nBand; band++) {
      const at = band * nx + this.first;
      bands.set(noise.fixedVariance.subarray(at, at + this.span), band * this.span);
    }
    return bands.byteOffset;
  }

  private place(values: ArrayLike<number>): number {
    const view = this.bench.int32(values.length);
    view.set(values);
    return view.byteOffset;
  }
}

/** Comparators, as pairs of byte offsets of lane rows, that sort `n` of them: Batcher's merging exchange (Knuth, The Art of
 * Computer Programming 3, 5.2.2, algorithm M), which holds for every n. */
function sortingNetwork(n: number): number[] {
  const comparators: number[] = [];
  let most = 1;
  while (2 * most < n) most *= 2;
  for (let p = most; p > 0; p >>= 1) {
    for (let q = most, r = 0, d = p; ; d = q - p, q >>= 1, r = p) {
      for (let i = 0; i < n - d; i++) if ((i & p) === r) comparators.push(16 * i, 16 * (i + d));
      if (q === p) break;
    }
  }
  return comparators;
}
