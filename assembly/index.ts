// Interface of the module that frames are read, corrected and extracted with. Pointers and counts in, numbers out; src/kernels/
// is the only caller. What tracing and the measuring of profiles need besides is tracing.ts, a module of its own.
export { bandedSystems32, bandedSystems64 } from "./banded";
export { census } from "./census";
export { checksum, toBigEndian } from "./checksum";
export { fitColumns } from "./columnFit";
export { electrons, growSaturation, turnBytes, turnFloat32 } from "./electrons";
export { erf } from "./erf";
export { exp } from "./exp";
export { extractTile32, extractTile64, prepareExtraction32, prepareExtraction64 } from "./extract";
export { settleTile32, settleTile64 } from "./grown";
export { legendreValue } from "./legendre";
export { median, quantile } from "./median";
export { pixelsToFloat32, pixelsToFloat64 } from "./pixels";
export { gaussianWeights64 } from "./profile";

/** First byte behind the compiler's own tables: where a workbench may begin. */
export function heapBase(): usize {
  return __heap_base;
}
