/** Joint linearised centring of all fibres in a column. Light near fibre k, whose centre is thought at y_k with width
 * σ_k, is modelled as
 *
 *     a P(y − y_k) + u ∂P/∂y_k + s ∂P/∂σ_k,      u = a·δ (shift),  s = a·δσ (widening; only when nPar = 3)
 *
 * over a background Σ b_q P_q, Legendre in the row. P is the Gaussian integrated over pixels. Linear in (a, u, s) of
 * all fibres, neighbours within `neighbours` places coupled: a banded system bordered by the few background columns,
 * which are eliminated through their Schur complement. The twin is src/reference/centring.ts.
 *
 * Two columns at once, one a lane; every array of numbers is interleaved [index][lane], f64.
 *
 *     unknowns of the band:   a_0 u_0 (s_0) a_1 u_1 (s_1) …      half-bandwidth nPar · (neighbours + 1) − 1 */
import { factorBand, inverseBand, solveBand } from "./banded";
import { erf } from "./erf";

const sqrtHalf: f64 = Math.SQRT1_2;
const inverseSqrtTwoPi: f64 = 0.3989422804014327;

/** Rows that a window of ± reach can touch. */
function windowRows(reach: f64): i32 {
  return 2 * <i32>Math.ceil(reach) + 2;
}

/** Bytes of scratch that `centreFibres` needs.
 *
 *     band | inverse band | border | solved border | basis | first rows | background basis | Schur complement, rhs */
export function centringScratchBytes(nRow: i32, nFibre: i32, nPar: i32, neighbours: i32, reach: f64, nBack: i32): f64 {
  const n = <f64>(nFibre * nPar);
  const band = n * <f64>(nPar * (neighbours + 1));
  const basis = n * <f64>windowRows(reach) + <f64>nFibre;
  return 16.0 * (2.0 * band + 2.0 * n * <f64>nBack + basis + <f64>nRow * <f64>nBack + <f64>(nBack * (nBack + 1)));
}

/** `dataPtr`, `weightPtr` (inverse variance, 0 for a pixel left out): nRow × 2; `centrePtr`, `sigmaPtr`: nFibre × 2.
 * Out: `solutionPtr`, nFibre · nPar × 2; `variancePtr`, the same, variances for a known background; `modelPtr`, nRow × 2,
 * the linear model with its background; `backgroundPtr`, nBack × 2. An unknown without light comes out as 0, variance 0. */
export function centreFibres(
  dataPtr: usize,
  weightPtr: usize,
  nRow: i32,
  centrePtr: usize,
  sigmaPtr: usize,
  nFibre: i32,
  nPar: i32,
  neighbours: i32,
  reach: f64,
  nBack: i32,
  solutionPtr: usize,
  variancePtr: usize,
  modelPtr: usize,
  backgroundPtr: usize,
  scratchPtr: usize,
): void {
  const n = nFibre * nPar;
  const b = nPar * (neighbours + 1) - 1;
  const nWindow = windowRows(reach);
  const bandBytes = (<usize>n * <usize>(b + 1)) << 4;
  const columnBytes = (<usize>n) << 4;
  const borderBytes = columnBytes * <usize>nBack;
  const bandPtr = scratchPtr;
  const inversePtr = bandPtr + bandBytes;
  const borderPtr = inversePtr + bandBytes;
  const solvedPtr = borderPtr + borderBytes;
  const basisPtr = solvedPtr + borderBytes;
  const firstPtr = basisPtr + columnBytes * <usize>nWindow;
  const rowBasisPtr = firstPtr + ((<usize>nFibre) << 4);
  const schurPtr = rowBasisPtr + ((<usize>nRow * <usize>nBack) << 4);

  memory.fill(bandPtr, 0, bandBytes);
  memory.fill(borderPtr, 0, borderBytes);
  memory.fill(solutionPtr, 0, columnBytes);
  backgroundBasis(rowBasisPtr, nRow, nBack);
  for (let lane: usize = 0; lane < 16; lane += 8) {
    const basis = basisPtr + lane;
    const first = firstPtr + lane;
    fillBasis(centrePtr + lane, sigmaPtr + lane, nFibre, nPar, reach, nWindow, nRow, basis, first);
    addFibres(weightPtr + lane, nFibre, nPar, neighbours, nWindow, nRow, basis, first, bandPtr + lane);
    project(dataPtr + lane, 16, weightPtr + lane, nFibre, nPar, nWindow, nRow, basis, first, solutionPtr + lane);
    for (let q: i32 = 0; q < nBack; q++) {
      const row = rowBasisPtr + ((<usize>q) << 3);
      const column = borderPtr + columnBytes * <usize>q + lane;
      project(row, (<usize>nBack) << 3, weightPtr + lane, nFibre, nPar, nWindow, nRow, basis, first, column);
    }
  }
  factorBand<f64>(bandPtr, n, b);
  inverseBand<f64>(bandPtr, n, b, inversePtr);
  for (let i: usize = 0; i < <usize>n; i++) {
    v128.store(variancePtr + (i << 4), v128.load(inversePtr + ((i * <usize>(b + 1)) << 4)));
  }
  solveBand<f64>(bandPtr, n, b, solutionPtr);
  memory.copy(solvedPtr, borderPtr, borderBytes);
  for (let q: i32 = 0; q < nBack; q++) solveBand<f64>(bandPtr, n, b, solvedPtr + columnBytes * <usize>q);
  for (let lane: usize = 0; lane < 16; lane += 8) {
    const background = backgroundPtr + lane;
    const x = solutionPtr + lane;
    schur(dataPtr + lane, weightPtr + lane, nRow, nBack, rowBasisPtr, schurPtr + lane);
    eliminate(n, nBack, borderPtr + lane, solvedPtr + lane, x, schurPtr + lane);
    solveDense(schurPtr + lane, nBack, background);
    for (let i: usize = 0; i < <usize>n; i++) {
      for (let q: usize = 0; q < <usize>nBack; q++) {
        const part = load<f64>(solvedPtr + lane + columnBytes * q + (i << 4)) * load<f64>(background + (q << 4));
        store<f64>(x + (i << 4), load<f64>(x + (i << 4)) - part);
      }
    }
    evaluate(
      nRow,
      nBack,
      nFibre,
      nPar,
      nWindow,
      basisPtr + lane,
      firstPtr + lane,
      rowBasisPtr,
      x,
      background,
      modelPtr + lane,
    );
  }
}

/** nRow × nBack (not in lanes): P_q(t), t = −1 in the first row and 1 in the last. */
function backgroundBasis(ptr: usize, nRow: i32, nBack: i32): void {
  for (let y: i32 = 0; y < nRow; y++) {
    const t: f64 = nRow > 1 ? (2.0 * <f64>y) / <f64>(nRow - 1) - 1.0 : 0.0;
    let below: f64 = 0.0;
    let here: f64 = 1.0;
    for (let q: i32 = 0; q < nBack; q++) {
      store<f64>(ptr + ((<usize>(y * nBack + q)) << 3), here);
      const above: f64 = (<f64>(2 * q + 1) * t * here - <f64>q * below) / <f64>(q + 1);
      below = here;
      here = above;
    }
  }
}

/** P, ∂P/∂y_k (and ∂P/∂σ_k) on each fibre's window of rows, 0 beyond the reach and the detector:
 * basis[((k · nPar + p) · nWindow + i)][lane]; firstRow[k][lane], an i32, where the window begins. */
function fillBasis(
  centrePtr: usize,
  sigmaPtr: usize,
  nFibre: i32,
  nPar: i32,
  reach: f64,
  nWindow: i32,
  nRow: i32,
  basisPtr: usize,
  firstPtr: usize,
): void {
  const planeBytes = (<usize>nWindow) << 4;
  for (let k: i32 = 0; k < nFibre; k++) {
    const centre = load<f64>(centrePtr + ((<usize>k) << 4));
    const sigma = load<f64>(sigmaPtr + ((<usize>k) << 4));
    const first = <i32>Math.floor(centre - reach + 0.5);
    store<i32>(firstPtr + ((<usize>k) << 4), first);
    const fibrePtr = basisPtr + <usize>(k * nPar) * planeBytes;
    let low = <f64>first - 0.5 - centre;
    let lowErf = erf((low * sqrtHalf) / sigma);
    let lowDensity = density(low, sigma);
    for (let i: i32 = 0; i < nWindow; i++) {
      const high = low + 1.0;
      const highErf = erf((high * sqrtHalf) / sigma);
      const highDensity = density(high, sigma);
      const y = first + i;
      const inside: f64 = y >= 0 && y < nRow && abs(low + 0.5) <= reach ? 1.0 : 0.0;
      const at = fibrePtr + ((<usize>i) << 4);
      store<f64>(at, inside * 0.5 * (highErf - lowErf));
      store<f64>(at + planeBytes, inside * (lowDensity - highDensity));
      if (nPar == 3) store<f64>(at + 2 * planeBytes, (inside * (low * lowDensity - high * highDensity)) / sigma);
      low = high;
      lowErf = highErf;
      lowDensity = highDensity;
    }
  }
}

function density(distance: f64, sigma: f64): f64 {
  const v = distance / sigma;
  return (inverseSqrtTwoPi / sigma) * Math.exp(-0.5 * v * v);
}

/** Σ_rows weight · basis_i · basis_j into the band, for fibres at most `neighbours` places apart. */
function addFibres(
  weightPtr: usize,
  nFibre: i32,
  nPar: i32,
  neighbours: i32,
  nWindow: i32,
  nRow: i32,
  basisPtr: usize,
  firstPtr: usize,
  bandPtr: usize,
): void {
  const rowEntries = nPar * (neighbours + 1);
  for (let k: i32 = 0; k < nFibre; k++) {
    const first = load<i32>(firstPtr + ((<usize>k) << 4));
    for (let m = k; m >= max(0, k - neighbours); m--) {
      const other = load<i32>(firstPtr + ((<usize>m) << 4));
      const from = max(0, max(first, other));
      const to = min(nRow, min(first, other) + nWindow);
      for (let p: i32 = 0; p < nPar; p++) {
        const i = k * nPar + p;
        for (let r: i32 = 0; r < nPar; r++) {
          const j = m * nPar + r;
          if (j > i) break;
          let sum: f64 = 0;
          for (let y = from; y < to; y++) {
            const mine = load<f64>(basisPtr + ((<usize>(i * nWindow + y - first)) << 4));
            const theirs = load<f64>(basisPtr + ((<usize>(j * nWindow + y - other)) << 4));
            sum += load<f64>(weightPtr + ((<usize>y) << 4)) * mine * theirs;
          }
          store<f64>(bandPtr + ((<usize>(i * rowEntries + i - j)) << 4), sum);
        }
      }
    }
  }
}

/** Σ_rows weight · basis_i · column(row) into `outPtr`; `columnPtr` steps by `stepBytes` a row. */
function project(
  columnPtr: usize,
  stepBytes: usize,
  weightPtr: usize,
  nFibre: i32,
  nPar: i32,
  nWindow: i32,
  nRow: i32,
  basisPtr: usize,
  firstPtr: usize,
  outPtr: usize,
): void {
  for (let k: i32 = 0; k < nFibre; k++) {
    const first = load<i32>(firstPtr + ((<usize>k) << 4));
    for (let i = k * nPar; i < (k + 1) * nPar; i++) {
      let sum: f64 = 0;
      for (let y = max(0, first); y < min(nRow, first + nWindow); y++) {
        const basis = load<f64>(basisPtr + ((<usize>(i * nWindow + y - first)) << 4));
        sum += load<f64>(weightPtr + ((<usize>y) << 4)) * basis * load<f64>(columnPtr + <usize>y * stepBytes);
      }
      store<f64>(outPtr + ((<usize>i) << 4), sum);
    }
  }
}

/** The background's own normal equations: nBack rows of nBack entries and the right-hand side. */
function schur(dataPtr: usize, weightPtr: usize, nRow: i32, nBack: i32, rowBasisPtr: usize, schurPtr: usize): void {
  for (let q: i32 = 0; q < nBack; q++) {
    for (let r: i32 = 0; r <= nBack; r++) {
      let sum: f64 = 0;
      for (let y: i32 = 0; y < nRow; y++) {
        const rowPtr = rowBasisPtr + ((<usize>(y * nBack)) << 3);
        const other = r < nBack ? load<f64>(rowPtr + ((<usize>r) << 3)) : load<f64>(dataPtr + ((<usize>y) << 4));
        sum += load<f64>(weightPtr + ((<usize>y) << 4)) * load<f64>(rowPtr + ((<usize>q) << 3)) * other;
      }
      store<f64>(schurPtr + ((<usize>(q * (nBack + 1) + r)) << 4), sum);
    }
  }
}

/** Takes what the fibres explain out of the background's equations: S − Cᵀ M⁻¹ C and r − Cᵀ M⁻¹ rhs. */
function eliminate(n: i32, nBack: i32, borderPtr: usize, solvedPtr: usize, xPtr: usize, schurPtr: usize): void {
  const columnBytes = (<usize>n) << 4;
  for (let q: i32 = 0; q < nBack; q++) {
    for (let r: i32 = 0; r <= nBack; r++) {
      const other = r < nBack ? solvedPtr + columnBytes * <usize>r : xPtr;
      const at = schurPtr + ((<usize>(q * (nBack + 1) + r)) << 4);
      let sum = load<f64>(at);
      for (let i: usize = 0; i < columnBytes; i += 16) {
        sum -= load<f64>(borderPtr + columnBytes * <usize>q + i) * load<f64>(other + i);
      }
      store<f64>(at, sum);
    }
  }
}

/** Gauss elimination of the small positive system `ptr` (n rows of n + 1); a lost pivot drops its unknown. */
function solveDense(ptr: usize, n: i32, xPtr: usize): void {
  const rowBytes = (<usize>(n + 1)) << 4;
  for (let i: i32 = 0; i < n; i++) {
    const row = ptr + <usize>i * rowBytes;
    const pivot = load<f64>(row + ((<usize>i) << 4));
    for (let j = i + 1; j < n; j++) {
      const below = ptr + <usize>j * rowBytes;
      const factor = pivot > 0 ? load<f64>(below + ((<usize>i) << 4)) / pivot : 0;
      for (let k: usize = (<usize>i) << 4; k < rowBytes; k += 16) {
        store<f64>(below + k, load<f64>(below + k) - factor * load<f64>(row + k));
      }
    }
  }
  for (let i = n - 1; i >= 0; i--) {
    const row = ptr + <usize>i * rowBytes;
    let sum = load<f64>(row + ((<usize>n) << 4));
    for (let k = i + 1; k < n; k++) sum -= load<f64>(row + ((<usize>k) << 4)) * load<f64>(xPtr + ((<usize>k) << 4));
    const pivot = load<f64>(row + ((<usize>i) << 4));
    store<f64>(xPtr + ((<usize>i) << 4), pivot > 0 ? sum / pivot : 0);
  }
}

/** Background and all fibres' terms on every row. */
function evaluate(
  nRow: i32,
  nBack: i32,
  nFibre: i32,
  nPar: i32,
  nWindow: i32,
  basisPtr: usize,
  firstPtr: usize,
  rowBasisPtr: usize,
  xPtr: usize,
  backgroundPtr: usize,
  modelPtr: usize,
): void {
  for (let y: i32 = 0; y < nRow; y++) {
    let sum: f64 = 0;
    for (let q: i32 = 0; q < nBack; q++) {
      sum += load<f64>(backgroundPtr + ((<usize>q) << 4)) * load<f64>(rowBasisPtr + ((<usize>(y * nBack + q)) << 3));
    }
    store<f64>(modelPtr + ((<usize>y) << 4), sum);
  }
  for (let k: i32 = 0; k < nFibre; k++) {
    const first = load<i32>(firstPtr + ((<usize>k) << 4));
    for (let i = k * nPar; i < (k + 1) * nPar; i++) {
      const x = load<f64>(xPtr + ((<usize>i) << 4));
      for (let y = max(0, first); y < min(nRow, first + nWindow); y++) {
        const at = modelPtr + ((<usize>y) << 4);
        store<f64>(at, load<f64>(at) + x * load<f64>(basisPtr + ((<usize>(i * nWindow + y - first)) << 4)));
      }
    }
  }
}
