// The module's whole interface. Pointers and counts in, numbers out; src/kernels/ is the only caller.
export { bandedSystems32, bandedSystems64 } from "./banded";
export { erf } from "./erf";
export { centreFibres, centringScratchBytes } from "./centring";
export { centroid } from "./centroid";
export { legendreFitClipped, legendreValue } from "./legendre";

/** First byte behind the compiler's own tables: where a workbench may begin. */
export function heapBase(): usize {
  return __heap_base;
}
