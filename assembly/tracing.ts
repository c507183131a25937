// Interface of the module that flats are traced and profiles measured with; it works in the same memories as index.ts, and the
// compiler's tables of the two lie one behind the other.
export { centreColumns } from "./centring";
export { centroid } from "./centroid";
export { groupMeans, groupMedians } from "./groups";
export { legendreBases, legendreFits } from "./legendre";
export { rankUpdate } from "./rankUpdate";
export { fitShapeColumns } from "./shapeColumn";
export { shapeNormals } from "./shapeNormal";

/** First byte behind the compiler's tables of both modules. */
export function heapBase(): usize {
  return __heap_base;
}
