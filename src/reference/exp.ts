/** The exponential function by its power series (Abramowitz & Stegun 4.2.1) on what is left of x beside a whole power of e. */

/** exp(x). Relative error below (|x| + 8) · 2⁻⁵²: each factor e brings its rounding. */
export function exp(x: number): number {
  const whole = Math.round(x);
  const rest = x - whole;
  let [term, sum] = [1, 1];
  for (let n = 1; Math.abs(term) > 1e-18; n++) {
    term *= rest / n;
    sum += term;
  }
  let power = 1;
  for (let n = 0; n < Math.abs(whole); n++) power *= Math.E;
  return whole < 0 ? sum / power : sum * power;
}
