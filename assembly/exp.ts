/** The exponential function: exp(x) = 2ᵏ · exp(r) with k = round(x / ln 2) and |r| ≤ ln 2 / 2, the latter by its power
 * series (Abramowitz & Stegun 4.2.1), of which the terms left out are below 5e-18.
 * Relative error below 4e-16; 0 below −708, ∞ above 709. */

const perLn2: f64 = Math.LOG2E;
/** ln 2 in two parts, the first with so few bits that its multiples are exact (Cody & Waite 1980, chapter 6). */
const ln2Head: f64 = 0.693359375;
const ln2Tail: f64 = -2.1219444005469057e-4;
const nTerm: i32 = 13;

export function exp(x: f64): f64 {
  if (!(x >= -708.0)) return x == x ? 0.0 : x;
  if (x > 709.0) return Infinity;
  const k = nearest(x * perLn2);
  const r = x - k * ln2Head - k * ln2Tail;
  let sum: f64 = 1.0;
  for (let n = nTerm; n >= 1; n--) sum = 1.0 + (r / <f64>n) * sum;
  return sum * reinterpret<f64>((<i64>k + 1023) << 52);
}
