/** What the WebAssembly module exports, as TypeScript sees it: pointers are byte offsets into the memory. */
export interface KernelExports {
  readonly __heap_base: WebAssembly.Global;

  /** assembly/legendre.ts */
  legendreValue(coefPtr: number, nCoef: number, t: number): number;
}
