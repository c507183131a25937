/** The door to assembly/electrons.ts: images lie in the memory of the workbench that is given. */
import type { AmplifierCounts, Growth, OddPixels, ZeroLevel } from "../reference/electrons.js";
import type { Workbench } from "./module.js";

export function electrons(bench: Workbench, part: AmplifierCounts, level: ZeroLevel): OddPixels {
  const { inPtr, electronsPtr, maskPtr } = pointers(bench, part);
  const zero = bench.float64(level.zero.length);
  zero.set(level.zero);
  const counts = bench.int32(3).fill(0);
  bench.call.electrons(
    inPtr,
    part.stride,
    part.nx,
    part.ny,
    zero.byteOffset,
    level.zeroForRow ? 1 : 0,
    level.gain,
    limit32(part.limit),
    level.zeroIsMissing ? 1 : 0,
    electronsPtr,
    maskPtr,
    part.outStride,
    counts.byteOffset,
  );
  const [nSaturated, nWithoutValue, nZero] = counts;
  return { nSaturated, nWithoutValue, nZero };
}

export function growSaturation(bench: Workbench, part: AmplifierCounts, growth: Growth): void {
  const { inPtr, maskPtr } = pointers(bench, part);
  const { bleed, growShort, growBleed } = growth;
  const { stride, nx, ny, outStride } = part;
  const run = bench.int32(nx).fill(0).byteOffset;
  const limit = limit32(part.limit);
  bench.call.growSaturation(inPtr, stride, nx, ny, limit, maskPtr, outStride, bleed, growShort, growBleed, run);
}

/** An image [ny × nx] turned about its diagonal, [nx × ny], into `out`, which lies elsewhere. */
export function turn<T extends Float32Array | Uint8Array>(
  bench: Workbench,
  image: T,
  nx: number,
  ny: number,
  out: T,
): void {
  requireWithin(bench, image);
  requireWithin(bench, out);
  if (image instanceof Float32Array) bench.call.turnFloat32(image.byteOffset, nx, ny, out.byteOffset);
  else bench.call.turnBytes(image.byteOffset, nx, ny, out.byteOffset);
}

function pointers(bench: Workbench, { data, from, electrons, mask, to }: AmplifierCounts) {
  if (!(data instanceof Float32Array)) throw new RangeError("The kernel takes counts in Float32.");
  for (const image of [data, electrons, mask]) requireWithin(bench, image);
  return {
    inPtr: data.byteOffset + 4 * from,
    electronsPtr: electrons.byteOffset + 4 * to,
    maskPtr: mask.byteOffset + to,
  };
}

/** The least Float32 that is not below the limit: of Float32 counts the same are from it on. */
function limit32(limit: number): number {
  const near = new Float32Array([limit]);
  if (near[0] >= limit) return near[0];
  // The next one up, as its bits count.
  new Int32Array(near.buffer)[0] += limit > 0 ? 1 : -1;
  return near[0];
}

function requireWithin(bench: Workbench, { buffer }: ArrayBufferView): void {
  if (buffer !== bench.memory.buffer) throw new RangeError("An image lies outside of the kernels' memory.");
}
