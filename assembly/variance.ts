/** Variance of pixels from the model of their light, in lanes; src/reference/variance.ts gives the equation. */
import { pointer, Word } from "./job";
import { lanesWithout, spread } from "./lanes";

/** v = fixed + max(m, 0)/r + (σ_r/r)²·m² on the row that lies `at` bytes into the lane rows; `light` includes background.
 * `responds`: whether the pixels' response is known at all, or r = 1 without error. */
export function pixelVariance<T extends number>(job: usize, fixed: v128, at: usize, light: v128, responds: bool): v128 {
  const photons = v128.pmax<T>(light, spread<T>(0));
  if (!responds) return v128.add<T>(fixed, photons);
  const flat = v128.mul<T>(v128.load(pointer(job, Word.responseVarianceRows) + at), v128.mul<T>(light, light));
  const seen = v128.mul<T>(photons, v128.load(pointer(job, Word.inverseResponseRows) + at));
  return v128.add<T>(v128.add<T>(fixed, seen), flat);
}

/** Whether any image of the pixels' response is there. */
export function knowsResponse(job: usize): bool {
  return pointer(job, Word.inverseResponse) != 0 || pointer(job, Word.responseRelativeVariance) != 0;
}

/** Inverse variances from the data's own light on lane rows row0 … row1 − 1, 0 where a pixel is not good. */
export function weighByData<T extends number>(job: usize, row0: i32, row1: i32): void {
  const responds = knowsResponse(job);
  const light = pointer(job, Word.light);
  const background = pointer(job, Word.backgroundRows);
  const ivar = pointer(job, Word.inverseVariance);
  const net = pointer(job, Word.net);
  const fixed = pointer(job, Word.fixed);
  const fixedRows = pointer(job, Word.fixedRows);
  const bits = pointer(job, Word.bits);
  const one = spread<T>(1);
  for (let row = row0; row < row1; row++) {
    const at = (<usize>row) << 4;
    const data = v128.load(light + at);
    const all = v128.add<T>(data, v128.load(background + at));
    const inverse = v128.div<T>(one, pixelVariance<T>(job, v128.load(fixed + (at & fixedRows)), at, all, responds));
    const masked = load<u32>(bits + (at >> 2));
    v128.store(ivar + at, masked ? v128.and(inverse, lanesWithout<T>(masked)) : inverse);
    v128.store(net + at, data);
  }
}
