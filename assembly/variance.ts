/** Variance of pixels from the model of their light, in lanes; src/reference/variance.ts gives the equation. */
import { pointer, Word } from "./job";
import { spread } from "./lanes";

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
