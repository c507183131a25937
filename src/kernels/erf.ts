/** Door to assembly/erf.ts. */
import type { Kernels } from "./module.js";

/** erf(x), absolute error below 3e-16, the same bits on every engine. */
export function erf(kernels: Kernels, x: number): number {
  return kernels.workbench(0).call.erf(x);
}
