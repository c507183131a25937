// The module's whole interface. Pointers and counts in, numbers out; src/kernels/ is the only caller.
export { bandedSystems32, bandedSystems64 } from "./banded";
export { census } from "./census";
export { centreColumns } from "./centring";
export { centroid } from "./centroid";
export { checksum, toBigEndian } from "./checksum";
export { fitColumns } from "./columnFit";
export { electrons, growSaturation, turnBytes, turnFloat32 } from "./electrons";
export { erf } from "./erf";
export { exp } from "./exp";
export {
  extractTile32,
  extractTile64,
  prepareExtraction32,
  prepareExtraction64,
  settleTile32,
  settleTile64,
} from "./extract";
export { groupMeans, groupMedians } from "./groups";
export { legendreBases, legendreFits, legendreValue } from "./legendre";
export { median, quantile } from "./median";
export { pixelsToFloat32, pixelsToFloat64 } from "./pixels";
export { gaussianWeights64 } from "./profile";
export { rankUpdate } from "./rankUpdate";
export { fitShapeColumns } from "./shapeColumn";
export { shapeNormals } from "./shapeNormal";

/** First byte behind the compiler's own tables: where a workbench may begin. */
export function heapBase(): usize {
  return __heap_base;
}
