// The module's whole interface. Pointers and counts in, numbers out; src/kernels/ is the only caller.
export { legendreValue } from "./legendre";
