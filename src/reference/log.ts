/** The natural logarithm by the area tangent's series (Abramowitz & Stegun 4.1.27):
 *
 *     x = m · 2ᵉ,  m ∈ [1/√2, √2):   ln x = e·ln 2 + 2·(z + z³/3 + z⁵/5 + …),  z = (m − 1)/(m + 1)
 *
 * |z| ≤ 0.172, so that twelve terms reach the last bit. */

/** ln x. Relative error below 4 · 2⁻⁵² but near x = 1, where the error stays below 2⁻⁵² · |ln x| + 2⁻⁵³ · |x − 1|; NaN below 0. */
export function log(x: number): number {
  if (!(x > 0)) return x === 0 ? Number.NEGATIVE_INFINITY : Number.NaN;
  if (x === Number.POSITIVE_INFINITY) return x;
  let [mantissa, exponent] = [x, 0];
  // Powers of two are exact.
  for (; mantissa >= Math.SQRT2; mantissa /= 2) exponent++;
  for (; mantissa < Math.SQRT1_2; mantissa *= 2) exponent--;
  const z = (mantissa - 1) / (mantissa + 1);
  const square = z * z;
  let sum = 0;
  for (let n = 25; n >= 1; n -= 2) sum = sum * square + 1 / n;
  return exponent * Math.LN2 + 2 * z * sum;
}
