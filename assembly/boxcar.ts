/** Boxcar extraction, in lanes: the plain sum over ± halfAperture pixels with fractional edge pixels;
 * src/reference/boxcar.ts is the same for one column. */
import { count, Numbers, number, pointer, Word, windowOffset, windowRows, windowWeights } from "./job";
import { overlap } from "./joint";
import { spread } from "./lanes";

/** Fills Word.raw, Word.crosstalkBand and Word.rawCovariance of fibres k0 … k1 − 1. */
export function boxcar<T extends number>(job: usize, k0: i32, k1: i32): void {
  const bandwidth = count(job, Word.bandwidth);
  const light = pointer(job, Word.net);
  const weighted = pointer(job, Word.weighted);
  for (let k = k0; k < k1; k++) fillAperture<T>(job, k);
  let crosstalkAt = pointer(job, Word.crosstalkBand) + ((<usize>(k0 * (2 * bandwidth + 1))) << 4);
  let covarianceAt = pointer(job, Word.rawCovariance) + ((<usize>(k0 * (bandwidth + 1))) << 4);
  for (let k = k0; k < k1; k++) {
    const own = apertureOf(job, k);
    v128.store(
      pointer(job, Word.raw) + ((<usize>k) << 4),
      sumOfProducts<T>(own, light + windowOffset(job, k), windowRows(job)),
    );
    for (let m = k - bandwidth; m <= k + bandwidth; m++) {
      const inside = m >= k0 && m < k1;
      v128.store(crosstalkAt, inside ? overlap<T>(job, k, m, own, windowWeights(job, m)) : spread<T>(0));
      crosstalkAt += 16;
    }
    noiseOfAperture<T>(job, k, weighted);
    for (let j: i32 = 0; j <= bandwidth; j++) {
      v128.store(
        covarianceAt,
        k - j >= k0 ? overlap<T>(job, k, k - j, weighted, apertureOf(job, k - j)) : spread<T>(0),
      );
      covarianceAt += 16;
    }
  }
}

/** Fraction of each window pixel that lies inside fibre k's aperture, 0 where the pixel is not good. */
function fillAperture<T extends number>(job: usize, k: i32): void {
  const half = spread<T>(number(job, Numbers.halfAperture));
  const centre = v128.load(pointer(job, Word.centre) + ((<usize>k) << 4));
  const top = v128.add<T>(centre, half);
  const bottom = v128.sub<T>(centre, half);
  const ivar = pointer(job, Word.inverseVariance) + windowOffset(job, k);
  for (let i: i32 = 0; i < windowRows(job); i++) {
    const at = (<usize>i) << 4;
    const upper = v128.pmin<T>(spread<T>(<f64>i + 0.5), top);
    const lower = v128.pmax<T>(spread<T>(<f64>i - 0.5), bottom);
    const inside = v128.pmax<T>(v128.sub<T>(upper, lower), spread<T>(0));
    const good = v128.gt<T>(v128.load(ivar + at), spread<T>(0));
    v128.store(apertureOf(job, k) + at, v128.and(inside, good));
  }
}

/** Aperture times variance, pixel by pixel, 0 where the pixel is not good. */
function noiseOfAperture<T extends number>(job: usize, k: i32, outPtr: usize): void {
  const ivar = pointer(job, Word.inverseVariance) + windowOffset(job, k);
  for (let at: usize = 0; at < (<usize>windowRows(job)) << 4; at += 16) {
    const inverse = v128.load(ivar + at);
    const noise = v128.div<T>(v128.load(apertureOf(job, k) + at), inverse);
    v128.store(outPtr + at, v128.and(noise, v128.gt<T>(inverse, spread<T>(0))));
  }
}

function sumOfProducts<T extends number>(a: usize, b: usize, n: i32): v128 {
  let sum = spread<T>(0);
  for (let at: usize = 0; at < (<usize>n) << 4; at += 16) {
    sum = v128.add<T>(sum, v128.mul<T>(v128.load(a + at), v128.load(b + at)));
  }
  return sum;
}

function apertureOf(job: usize, k: i32): usize {
  return pointer(job, Word.aperture) + ((<usize>k * <usize>windowRows(job)) << 4);
}
