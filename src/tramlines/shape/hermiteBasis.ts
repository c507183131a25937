/** A Gaussian with Gauss–Hermite terms and a broad exponential wing (van der Marel & Franx 1993, ApJ 407, 525):
 *
 *     c(v) = α(w) [a_0 + Σ_{j=3}^{6} a_j H_j(w)] + b · e(v) + b′ · ∂e/∂ln L,    w = v / σ
 *     α(w) = exp(−w²/2) / (√(2π) σ),    e(v) = exp(−|v| / L) / 2L
 *
 * H_j are theirs: orthonormal under α² up to a factor, H_0 = 1, H_1 = √2 w. There are no H_1 and H_2, which would be a
 * shift and a change of width; those belong to the fibres. All integrals are exact. The last function tells how the
 * wing's length L must change for the next step, and stays as a small correction after the last one. */
import type { Kernels } from "../../kernels/module.js";
import { nShapeTerm } from "../../reference/shape.js";
import type { ShapeBasis } from "./basis.js";

const reachSigma = 20;
const pointsPerSigma = 32;
/** Gaussian, H_3 … H_6, wing, change of its length. */
export const nHermiteFunction = 7;
const nFunction = nHermiteFunction;
const highestOrder = 6;
const wingAt = 5;
/** Prior departures over the detector: a share of the Gaussian, of every H_j against the Gaussian, of the wing. */
const gaussianShare = 0.2;
const hermiteSpread = 0.05;
const wingShare = 0.05;
const lengthSpread = 5e-4;
/** Before anything is measured: share of the light in the wing, and its length, σ. */
const startWing = 0.02;
const startWingScale = 4;
/** σ: a shorter wing would be the core itself, a longer one scattered light. */
const shortestWing = 1.5;
const longestWing = 10;
/** A step changes the wing's length by this share at most. */
const largestChange = 0.3;

/** `referenceWidth`: σ, pixels; `wingScale`: L, σ. */
export function hermiteBasis(kernels: Kernels, referenceWidth: number, wingScale = startWingScale): ShapeBasis {
  const { exp, erf } = kernels.workbench(0).call;
  const n = 2 * reachSigma * pointsPerSigma + 1;
  const values = new Float64Array(n * 2 * nFunction);
  const cut = wingIntegrals(exp, -reachSigma, wingScale);
  for (let i = 0; i < n; i++) {
    const w = -reachSigma + i / pointsPerSigma;
    const row = i * 2 * nFunction;
    const { integral, value } = hermiteFunctions(
      w,
      exp(-0.5 * w * w) * inverseRootTwoPi,
      0.5 + 0.5 * erf(w * rootHalf),
    );
    const wing = wingIntegrals(exp, w, wingScale);
    const all = [integral[0], ...integral.subarray(3), wing.integral - cut.integral, wing.byLength - cut.byLength];
    const slopes = [value[0], ...value.subarray(3), wing.value, wing.valueByLength];
    values.set(all, row);
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
    priorShare: Float64Array.of(gaussianShare, 0, 0, 0, 0, wingShare, 0),
    priorSpread: Float64Array.of(0, hermiteSpread, hermiteSpread, hermiteSpread, hermiteSpread, 1e-6, lengthSpread),
    canMove: false,
    referenceWidth,
    wingScale,
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

/** e, its integral, and both differentiated by ln L; w and L in σ. */
function wingIntegrals(exp: (x: number) => number, w: number, length: number) {
  const u = Math.abs(w) / length;
  const tail = 0.5 * exp(-u);
  const side = w < 0 ? 1 : -1;
  return {
    integral: w < 0 ? tail : 1 - tail,
    value: tail / length,
    byLength: side * tail * u,
    valueByLength: ((u - 1) * tail) / length,
  };
}

/** A Gaussian with a little wing: [7 × nShapeTerm]. */
export function hermiteStart(): Float64Array {
  const coefficients = new Float64Array(nFunction * nShapeTerm);
  coefficients[0] = 1 - startWing;
  coefficients[wingAt * nShapeTerm] = startWing;
  return coefficients;
}

/** The basis with the wing's length that `coefficients` ask for, and the coefficients there. */
export function followWing(
  kernels: Kernels,
  basis: ShapeBasis,
  coefficients: Float64Array,
): { basis: ShapeBasis; coefficients: Float64Array } {
  const { wingScale = startWingScale, referenceWidth } = basis;
  const share = coefficients[wingAt * nShapeTerm];
  if (!(share > 0)) return { basis, coefficients };
  const change = coefficients[(wingAt + 1) * nShapeTerm] / share;
  const next = wingScale * (1 + Math.min(Math.max(change, -largestChange), largestChange));
  const followed = hermiteBasis(kernels, referenceWidth, Math.min(Math.max(next, shortestWing), longestWing));
  return { basis: followed, coefficients: coefficients.slice().fill(0, (wingAt + 1) * nShapeTerm) };
}
