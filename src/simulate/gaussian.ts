/** The normal distribution's cumulative and density, to full double precision.
 *
 * erf by its Maclaurin series (Abramowitz & Stegun 7.1.6, all terms positive) up to 3, erfc by its continued fraction
 * (7.1.14) beyond. */

const SQRT_PI = Math.sqrt(Math.PI);

/** The integral of the unit Gaussian from −∞ to z. Absolute error about 1e-16. */
export function normalCumulative(z: number): number {
  const upper = 0.5 * erfcOfPositive(Math.abs(z) / Math.SQRT2);
  return z < 0 ? upper : 1 - upper;
}

export function normalDensity(z: number): number {
  return Math.exp(-0.5 * z * z) / Math.sqrt(2 * Math.PI);
}

function erfcOfPositive(x: number): number {
  if (x > 27) return 0;
  return x < 3 ? 1 - erfBySeries(x) : erfcByFraction(x);
}

function erfBySeries(x: number): number {
  let term = x;
  let sum = x;
  for (let n = 1; term > 1e-17 * sum; n++) {
    term *= (2 * x * x) / (2 * n + 1);
    sum += term;
  }
  return (2 / SQRT_PI) * Math.exp(-x * x) * sum;
}

function erfcByFraction(x: number): number {
  let fraction = x;
  for (let n = 60; n > 0; n--) fraction = x + n / 2 / fraction;
  return Math.exp(-x * x) / (SQRT_PI * fraction);
}
