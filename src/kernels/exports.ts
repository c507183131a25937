/** What the WebAssembly module exports, as TypeScript sees it: pointers are byte offsets into the memory. */
export interface KernelExports {
  /** assembly/index.ts: first byte that a workbench may hand out. */
  heapBase(): number;

  /** assembly/banded.ts */
  bandedSystems32(bandPtr: number, n: number, b: number, rhsPtr: number, inversePtr: number): void;
  bandedSystems64(bandPtr: number, n: number, b: number, rhsPtr: number, inversePtr: number): void;

  /** assembly/census.ts */
  census(ptr: number, n: number, outPtr: number): void;

  /** assembly/checksum.ts */
  checksum(ptr: number, nBytes: number): number;
  toBigEndian(ptr: number, n: number, width: number, unsigned: number): void;

  /** assembly/electrons.ts */
  electrons(
    inPtr: number,
    stride: number,
    nx: number,
    ny: number,
    zeroPtr: number,
    zeroForRow: number,
    gain: number,
    limit: number,
    zeroIsMissing: number,
    electronsPtr: number,
    maskPtr: number,
    outStride: number,
    countPtr: number,
  ): void;
  growSaturation(
    inPtr: number,
    stride: number,
    nx: number,
    ny: number,
    limit: number,
    maskPtr: number,
    outStride: number,
    bleed: number,
    growShort: number,
    growBleed: number,
    runPtr: number,
  ): void;
  turnBytes(inPtr: number, nx: number, ny: number, outPtr: number): void;
  turnFloat32(inPtr: number, nx: number, ny: number, outPtr: number): void;

  /** assembly/columnFit.ts: a tile is a group of columns. */
  fitColumns(jobPtr: number, tile: number): void;

  /** assembly/erf.ts */
  erf(x: number): number;

  /** assembly/exp.ts */
  exp(x: number): number;

  /** assembly/extract.ts */
  prepareExtraction32(jobPtr: number): void;
  prepareExtraction64(jobPtr: number): void;
  extractTile32(jobPtr: number, tile: number): void;
  extractTile64(jobPtr: number, tile: number): void;
  settleTile32(jobPtr: number, tile: number): void;
  settleTile64(jobPtr: number, tile: number): void;

  /** assembly/rankUpdate.ts */
  rankUpdate(gPtr: number, nRow: number, nBlock: number, sign: number, outPtr: number, filledPtr: number): void;

  /** assembly/shapeColumn.ts */
  fitShapeColumns(jobPtr: number, tile: number): void;

  /** assembly/shapeNormal.ts */
  shapeNormals(jobPtr: number, tile: number): void;

  /** assembly/profile.ts */
  gaussianWeights64(centre: number, sigma: number, first: number, n: number, outPtr: number): void;

  /** assembly/legendre.ts */
  legendreValue(coefPtr: number, nCoef: number, t: number): number;
  legendreBases(jobPtr: number): void;
  legendreFits(jobPtr: number, tile: number): void;

  /** assembly/centring.ts */
  centreColumns(jobPtr: number, tile: number): void;

  /** assembly/groups.ts */
  groupMedians(jobPtr: number, tile: number): void;
  groupMeans(jobPtr: number, tile: number): void;

  /** assembly/centroid.ts */
  centroid(dataPtr: number, goodPtr: number, n: number, centre: number, halfWidth: number, background: number): number;

  /** assembly/pixels.ts */
  pixelsToFloat32(
    bitpix: number,
    inPtr: number,
    outPtr: number,
    n: number,
    zero: number,
    hasBlank: number,
    blank: bigint,
  ): void;
  pixelsToFloat64(
    bitpix: number,
    inPtr: number,
    outPtr: number,
    n: number,
    scale: number,
    zero: number,
    hasBlank: number,
    blank: bigint,
  ): void;

  /** assembly/median.ts: both lose the order of what lies at `ptr`. */
  median(ptr: number, n: number): number;
  quantile(ptr: number, n: number, q: number): number;
}

/** Kernels that work on one tile of a job: what `Workbench.share` can hand out. */
export type TileKernel = {
  [Name in keyof KernelExports]: KernelExports[Name] extends (jobPtr: number, tile: number) => void
    ? Parameters<KernelExports[Name]>["length"] extends 2
      ? Name
      : never
    : never;
}[keyof KernelExports];
