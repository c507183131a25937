/** Door to assembly/exp.ts. */
import type { Kernels } from "./module.js";

/** exp(x), relative error below 4e-16, the same bits on every engine; 0 below −708, ∞ above 709. */
export function exp(kernels: Kernels, x: number): number {
  return kernels.workbench(0).call.exp(x);
}
