/** The door to assembly/census.ts. */
import type { Census } from "../reference/census.js";
import type { Workbench } from "./module.js";

/** Census of `data`, which lie in the memory of `bench`. */
export function census(bench: Workbench, data: Float32Array): Census {
  if (data.buffer !== bench.memory.buffer) throw new RangeError("The image lies outside of the kernels' memory.");
  const out = bench.float64(5);
  bench.call.census(data.byteOffset, data.length, out.byteOffset);
  const [nFinite, nNegative, nFraction, lowest, highest] = out;
  return { nFinite, nNegative, nFraction, lowest, highest };
}
