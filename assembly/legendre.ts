import { median } from "./median";

/** Σ_j c_j P_j(t) by the three-term recurrence (j+1) P_{j+1} = (2j+1) t P_j − j P_{j−1}.
 * `coefPtr`: nCoef f64. The reference twin is src/reference/legendre.ts, operation for operation. */
export function legendreValue(coefPtr: usize, nCoef: i32, t: f64): f64 {
  let below: f64 = 1.0;
  let here: f64 = t;
  let sum: f64 = load<f64>(coefPtr);
  for (let j: i32 = 1; j < nCoef; j++) {
    sum += load<f64>(coefPtr + ((<usize>j) << 3)) * here;
    const above: f64 = (<f64>(2 * j + 1) * t * here - <f64>j * below) / <f64>(j + 1);
    below = here;
    here = above;
  }
  return sum;
}

/** Weighted least squares for y(t) = Σ c_j P_j(t), through the normal equations in the Legendre basis (well
 * conditioned on [−1, 1]) and two rounds of refinement on the residuals.
 * `tPtr`, `yPtr`, `weightPtr`: n f64; `coefPtr`: nCoef f64, the result; returns Σ weight · residual².
 * `scratchPtr`: nCoef · (nCoef + 2) f64:   normal matrix | right-hand side | basis at one t
 * A coefficient that the points do not fix comes out as 0. */
export function legendreFit(
  tPtr: usize,
  yPtr: usize,
  weightPtr: usize,
  n: i32,
  nCoef: i32,
  coefPtr: usize,
  scratchPtr: usize,
): f64 {
  const size = <usize>nCoef;
  const rhsPtr = scratchPtr + ((size * size) << 3);
  const basisPtr = rhsPtr + (size << 3);
  accumulate(tPtr, weightPtr, n, nCoef, scratchPtr, basisPtr);
  cholesky(scratchPtr, nCoef);
  memory.fill(coefPtr, 0, size << 3);
  for (let round = 0; round < 3; round++) {
    memory.fill(rhsPtr, 0, size << 3);
    for (let i: i32 = 0; i < n; i++) {
      const at = (<usize>i) << 3;
      const t = load<f64>(tPtr + at);
      const weighted = load<f64>(weightPtr + at) * (load<f64>(yPtr + at) - legendreValue(coefPtr, nCoef, t));
      legendreBasis(t, nCoef, basisPtr);
      for (let j: usize = 0; j < size << 3; j += 8) {
        store<f64>(rhsPtr + j, load<f64>(rhsPtr + j) + weighted * load<f64>(basisPtr + j));
      }
    }
    choleskySolve(scratchPtr, nCoef, rhsPtr);
    for (let j: usize = 0; j < size << 3; j += 8) {
      store<f64>(coefPtr + j, load<f64>(coefPtr + j) + load<f64>(rhsPtr + j));
    }
  }
  let chi2: f64 = 0;
  for (let i: i32 = 0; i < n; i++) {
    const at = (<usize>i) << 3;
    const residual = load<f64>(yPtr + at) - legendreValue(coefPtr, nCoef, load<f64>(tPtr + at));
    chi2 += load<f64>(weightPtr + at) * residual * residual;
  }
  return chi2;
}

/** `legendreFit` with points beyond `kappa` scatters left out in turns; the scatter is 1.4826 × the median of
 * |residual| · √weight over the points in use, so that outliers cannot hide themselves.
 * `weightPtr`: n f64, set to 0 for a point that is left out. Returns how many points are in use.
 * `scratchPtr`: nCoef · (nCoef + 2) + 2 n f64, the last 2 n for the weights given and the residuals. */
export function legendreFitClipped(
  tPtr: usize,
  yPtr: usize,
  weightPtr: usize,
  n: i32,
  nCoef: i32,
  kappa: f64,
  maxRounds: i32,
  coefPtr: usize,
  scratchPtr: usize,
): i32 {
  const givenPtr = scratchPtr + ((<usize>(nCoef * (nCoef + 2))) << 3);
  const residualPtr = givenPtr + ((<usize>n) << 3);
  memory.copy(givenPtr, weightPtr, (<usize>n) << 3);
  let nUsed = 0;
  for (let round = 0; round <= maxRounds; round++) {
    legendreFit(tPtr, yPtr, weightPtr, n, nCoef, coefPtr, scratchPtr);
    nUsed = 0;
    for (let i: i32 = 0; i < n; i++) {
      const at = (<usize>i) << 3;
      if (load<f64>(weightPtr + at) == 0) continue;
      store<f64>(residualPtr + ((<usize>nUsed) << 3), scaledResidual(tPtr, yPtr, givenPtr, at, nCoef, coefPtr));
      nUsed++;
    }
    if (round == maxRounds || nUsed <= nCoef) break;
    const limit = kappa * 1.4826 * median(residualPtr, nUsed);
    let changed = false;
    for (let i: i32 = 0; i < n; i++) {
      const at = (<usize>i) << 3;
      const kept = scaledResidual(tPtr, yPtr, givenPtr, at, nCoef, coefPtr) <= limit;
      const weight = kept ? load<f64>(givenPtr + at) : 0;
      if (weight != load<f64>(weightPtr + at)) changed = true;
      store<f64>(weightPtr + at, weight);
    }
    if (!changed) break;
  }
  return nUsed;
}

/** |y − y(t)| · √weight of the point at byte offset `at`. */
function scaledResidual(tPtr: usize, yPtr: usize, weightPtr: usize, at: usize, nCoef: i32, coefPtr: usize): f64 {
  const residual = load<f64>(yPtr + at) - legendreValue(coefPtr, nCoef, load<f64>(tPtr + at));
  return abs(residual) * sqrt(load<f64>(weightPtr + at));
}

/** P_0(t) … P_{nCoef−1}(t). */
function legendreBasis(t: f64, nCoef: i32, basisPtr: usize): void {
  let below: f64 = 1.0;
  let here: f64 = t;
  store<f64>(basisPtr, 1.0);
  for (let j: i32 = 1; j < nCoef; j++) {
    store<f64>(basisPtr + ((<usize>j) << 3), here);
    const above: f64 = (<f64>(2 * j + 1) * t * here - <f64>j * below) / <f64>(j + 1);
    below = here;
    here = above;
  }
}

/** Lower triangle of Σ weight · P_i P_j. */
function accumulate(tPtr: usize, weightPtr: usize, n: i32, nCoef: i32, normalPtr: usize, basisPtr: usize): void {
  memory.fill(normalPtr, 0, (<usize>(nCoef * nCoef)) << 3);
  for (let k: i32 = 0; k < n; k++) {
    const weight = load<f64>(weightPtr + ((<usize>k) << 3));
    if (weight == 0) continue;
    legendreBasis(load<f64>(tPtr + ((<usize>k) << 3)), nCoef, basisPtr);
    for (let i: i32 = 0; i < nCoef; i++) {
      const weighted = weight * load<f64>(basisPtr + ((<usize>i) << 3));
      for (let j: i32 = 0; j <= i; j++) {
        const at = normalPtr + ((<usize>(i * nCoef + j)) << 3);
        store<f64>(at, load<f64>(at) + weighted * load<f64>(basisPtr + ((<usize>j) << 3)));
      }
    }
  }
}

/** Lower triangle overwritten by its Cholesky factor; a pivot lost in rounding becomes 0 and drops its unknown. */
function cholesky(ptr: usize, n: i32): void {
  for (let i: i32 = 0; i < n; i++) {
    const row = ptr + ((<usize>(i * n)) << 3);
    const diagonal = load<f64>(row + ((<usize>i) << 3));
    for (let j: i32 = 0; j <= i; j++) {
      const other = ptr + ((<usize>(j * n)) << 3);
      let sum = load<f64>(row + ((<usize>j) << 3));
      for (let k: i32 = 0; k < j; k++) {
        sum -= load<f64>(row + ((<usize>k) << 3)) * load<f64>(other + ((<usize>k) << 3));
      }
      if (j == i) {
        store<f64>(row + ((<usize>i) << 3), sum > 1e-13 * diagonal ? sqrt(sum) : 0);
      } else {
        const pivot = load<f64>(other + ((<usize>j) << 3));
        store<f64>(row + ((<usize>j) << 3), pivot > 0 ? sum / pivot : 0);
      }
    }
  }
}

function choleskySolve(ptr: usize, n: i32, rhsPtr: usize): void {
  for (let i: i32 = 0; i < n; i++) {
    const row = ptr + ((<usize>(i * n)) << 3);
    let sum = load<f64>(rhsPtr + ((<usize>i) << 3));
    for (let k: i32 = 0; k < i; k++) sum -= load<f64>(row + ((<usize>k) << 3)) * load<f64>(rhsPtr + ((<usize>k) << 3));
    const pivot = load<f64>(row + ((<usize>i) << 3));
    store<f64>(rhsPtr + ((<usize>i) << 3), pivot > 0 ? sum / pivot : 0);
  }
  for (let i: i32 = n - 1; i >= 0; i--) {
    let sum = load<f64>(rhsPtr + ((<usize>i) << 3));
    for (let k: i32 = i + 1; k < n; k++) {
      sum -= load<f64>(ptr + ((<usize>(k * n + i)) << 3)) * load<f64>(rhsPtr + ((<usize>k) << 3));
    }
    const pivot = load<f64>(ptr + ((<usize>(i * n + i)) << 3));
    store<f64>(rhsPtr + ((<usize>i) << 3), pivot > 0 ? sum / pivot : 0);
  }
}
