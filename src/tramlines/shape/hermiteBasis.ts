/** A Gaussian with Gauss–Hermite terms (van der Marel & Franx 1993, ApJ 407, 525) and broad exponential wings:
 *
 *     c(v) = α(w) [a_0 + Σ_{j=3}^{6} a_j H_j(w)] + Σ_i b_i exp(−|w| / L_i) / (2 L_i σ),    w = v / σ
 *     α(w) = exp(−w²/2) / (√(2π) σ)
 *
 * H_j are theirs: Hermite polynomials that are orthogonal under α², H_0 = 1, H_1 = √2 w. There are no H_1 and H_2, which
 * would be a shift and a change of width; those belong to the fibres. All integrals are exact. Two wings of fixed
 * length, since one whose length is fitted follows what the Gauss–Hermite terms miss at 2 to 4 σ, and is then
 * too short further out, where it takes light from faint fibres. */
import type { Kernels } from "../../kernels/module.js";
import { nShapeTerm } from "../../reference/shape.js";
import type { ShapeBasis } from "../../reference/shapeBasis.js";

const reachSigma = 20;
const pointsPerSigma = 32;
/** Lengths of the wings, σ: the foot of the core, and what reaches over to the neighbours. */
const wingScales = [2, 6];
/** Gaussian, H_3 … H_6, wings. */
export const nHermiteFunction = 7;
const nFunction = nHermiteFunction;
const highestOrder = 6;
/** Prior departures over the detector: a share of the Gaussian, of every H_j against the Gaussian, of each wing. */
const gaussianShare = 0.2;
const hermiteSpread = 0.05;
const wingShare = 0.05;
/** Share of the light in each wing before anything is measured. */
const startWing = 0.01;

/** `referenceWidth`: σ, pixels. */
export function hermiteBasis(kernels: Kernels, referenceWidth: number): ShapeBasis {
  const { exp, erf } = kernels.workbench(0).call;
  const n = 2 * reachSigma * pointsPerSigma + 1;
  const values = new Float64Array(n * 2 * nFunction);
  for (let i = 0; i < n; i++) {
    const w = -reachSigma + i / pointsPerSigma;
    const row = i * 2 * nFunction;
    const core = hermiteFunctions(w, exp(-0.5 * w * w) * inverseRootTwoPi, 0.5 + 0.5 * erf(w * rootHalf));
    const wings = wingScales.map((length) => wingAt(exp, w, length));
    values.set([core.integral[0], ...core.integral.subarray(3), ...wings.map(({ integral }) => integral)], row);
    const slopes = [core.value[0], ...core.value.subarray(3), ...wings.map(({ value }) => value)];
    values.set(
      slopes.map((slope) => slope / referenceWidth),
      row + nFunction,
    );
  }
  return {
    nSpline: nFunction,
    start: -reachSigma * referenceWidth,
    step: referenceWidth / pointsPerSigma,
    n,
    values,
    whole: values.slice((n - 1) * 2 * nFunction, (n - 1) * 2 * nFunction + nFunction),
    priorShare: Float64Array.of(gaussianShare, 0, 0, 0, 0, wingShare, wingShare),
    priorSpread: Float64Array.of(0, hermiteSpread, hermiteSpread, hermiteSpread, hermiteSpread, 1e-6, 1e-6),
    canMove: false,
    referenceWidth,
    begun: Int32Array.from({ length: 2 * (n - 1) }, (_, i) => (i % 2 === 0 ? 0 : nFunction - 1)),
  };
}

const inverseRootTwoPi = 0.3989422804014327;
const rootHalf = Math.SQRT1_2;

/** α H_j, and its integral from −∞, for j = 0 … 6 at w. With H_{j+1} = (√2 w H_j − √j H_{j−1}) / √(j+1) and the slope
 * of H_j exp(−w²/2) follows I_{j+1} = √(j/(j+1)) I_{j−1} − √(2/(j+1)) α H_j. `density`: α(w); `below`: its integral. */
function hermiteFunctions(w: number, density: number, below: number): { integral: Float64Array; value: Float64Array } {
  const value = Float64Array.of(density, Math.SQRT2 * w * density, 0, 0, 0, 0, 0);
  const integral = Float64Array.of(below, -Math.SQRT2 * density, 0, 0, 0, 0, 0);
  for (let j = 1; j < highestOrder; j++) {
    value[j + 1] = (Math.SQRT2 * w * value[j] - Math.sqrt(j) * value[j - 1]) / Math.sqrt(j + 1);
    integral[j + 1] = Math.sqrt(j / (j + 1)) * integral[j - 1] - Math.sqrt(2 / (j + 1)) * value[j];
  }
  return { integral, value };
}

/** A wing at w and its integral from the table's beginning on; `length` in σ. */
function wingAt(exp: (x: number) => number, w: number, length: number): { integral: number; value: number } {
  const half = 0.5 * exp(-Math.abs(w) / length);
  const before = 0.5 * exp(-reachSigma / length);
  return { integral: (w < 0 ? half : 1 - half) - before, value: half / length };
}

/** A Gaussian with a little wing: [7 × nShapeTerm]. */
export function hermiteStart(): Float64Array {
  const coefficients = new Float64Array(nFunction * nShapeTerm);
  coefficients[0] = 1 - wingScales.length * startWing;
  wingScales.forEach((_, i) => {
    coefficients[(nFunction - wingScales.length + i) * nShapeTerm] = startWing;
  });
  return coefficients;
}
