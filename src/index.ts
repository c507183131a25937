/** The public library. */
export { loadKernels } from "./kernels/module.js";
