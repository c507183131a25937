/** Variance of pixels from the model of their light, in lanes; src/reference/variance.ts gives the equation. */
import { laneRows, pointer, Word } from "./job";
import { lanesWithout, spread } from "./lanes";

/** v = fixed + max(m, 0)/r + (σ_r/r)²·m² on the row that lies `at` bytes into the lane rows; `light` includes background. */
export function pixelVariance<T extends number>(job: usize, at: usize, light: v128): v128 {
  const photons = v128.mul<T>(
    v128.pmax<T>(light, spread<T>(0)),
    v128.load(pointer(job, Word.inverseResponseRows) + at),
  );
  const flat = v128.mul<T>(v128.load(pointer(job, Word.responseVarianceRows) + at), v128.mul<T>(light, light));
  return v128.add<T>(v128.add<T>(v128.load(pointer(job, Word.fixed) + at), photons), flat);
}

/** Inverse variances for the light in lane rows `lightPtr` + background, 0 where a pixel is not good; lanes that `active`
 * leaves out keep what they had. */
export function weighRows<T extends number>(job: usize, lightPtr: usize, active: v128): void {
  const nRow = laneRows(job);
  const ivar = pointer(job, Word.inverseVariance);
  const background = pointer(job, Word.backgroundRows);
  const bits = pointer(job, Word.bits);
  const one = spread<T>(1);
  for (let row: i32 = 0; row < nRow; row++) {
    const at = (<usize>row) << 4;
    const light = v128.add<T>(v128.load(lightPtr + at), v128.load(background + at));
    const good = lanesWithout<T>(load<u32>(bits + ((<usize>row) << 2)));
    const fresh = v128.and(v128.div<T>(one, pixelVariance<T>(job, at, light)), good);
    v128.store(ivar + at, v128.bitselect(fresh, v128.load(ivar + at), active));
  }
}
