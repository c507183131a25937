/** Quantised floats back to floats, with subtractive dithering or without (FITS Standard 4.0, section 10.2.1 and
 * appendix I): value = (stored − r + ½) · scale + zero, r from a fixed list of 10 000 random numbers. */

const N_RANDOM = 10000;
/** SUBTRACTIVE_DITHER_2 keeps exact zeros as this number. */
const EXACT_ZERO = -2147483646;

/** `stored` of tile `row` (from 0) to values; `blank` to NaN. */
export type Dither = (
  stored: ArrayLike<number>,
  row: number,
  scale: number,
  zero: number,
  blank: number | undefined,
) => Float64Array;

/** By the name in ZQUANTIZ; `seed`: ZDITHER0. Undefined for a name that is not of the standard. */
export function ditherOf(name: string, seed: number): Dither | undefined {
  if (name === "NO_DITHER" || name === "NONE") {
    return (stored, _row, scale, zero, blank) =>
      Float64Array.from(stored, (v) => (v === blank ? Number.NaN : v * scale + zero));
  }
  if (name !== "SUBTRACTIVE_DITHER_1" && name !== "SUBTRACTIVE_DITHER_2") return undefined;
  const keepsZeros = name === "SUBTRACTIVE_DITHER_2";
  const random = randomNumbers();
  return (stored, row, scale, zero, blank) => {
    let start = (((row + seed - 1) % N_RANDOM) + N_RANDOM) % N_RANDOM;
    let next = Math.floor(random[start] * 500);
    return Float64Array.from(stored, (v) => {
      const r = random[next++];
      if (next === N_RANDOM) {
        start = (start + 1) % N_RANDOM;
        next = Math.floor(random[start] * 500);
      }
      if (v === blank) return Number.NaN;
      return keepsZeros && v === EXACT_ZERO ? 0 : (v - r + 0.5) * scale + zero;
    });
  };
}

/** The standard's generator (Park & Miller 1988, CACM 31, 1192): seed ← 16807 · seed mod 2³¹ − 1. Single precision. */
function randomNumbers(): Float32Array {
  const modulus = 2147483647;
  let seed = 1;
  return Float32Array.from({ length: N_RANDOM }, () => {
    seed = (16807 * seed) % modulus;
    return seed / modulus;
  });
}
