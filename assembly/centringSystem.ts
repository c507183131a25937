/** The bordered banded system of centring.ts for a pair of columns, in lanes: sums, solution, model. The twin is
 * src/reference/centring.ts. */
import { CentringWord } from "../src/kernels/centring-words";
import { factorBand, inverseBand, solveBandSides } from "./banded";
import { count, ofPair, pointer } from "./centringJob";

/** Weighted least squares with the weights set; solution, background and model, and on request variances. */
export function solve(job: usize, pair: i32, withVariance: bool): void {
  const nPar = count(job, CentringWord.nPar);
  const nBack = count(job, CentringWord.nBack);
  const n = count(job, CentringWord.nFibre) * nPar;
  const b = nPar * (count(job, CentringWord.neighbours) + 1) - 1;
  const band = pointer(job, CentringWord.band);
  const sides = pointer(job, CentringWord.sides);
  const inverse = pointer(job, CentringWord.inverse);
  memory.fill(band, 0, (<usize>(n * (b + 1))) << 4);
  addFibres(job, ofPair(job, CentringWord.data, pair, count(job, CentringWord.nRow)));
  factorBand<f64>(band, n, b);
  if (withVariance) {
    inverseBand<f64>(band, n, b, inverse);
    const variance = ofPair(job, CentringWord.variance, pair, n);
    for (let i: usize = 0; i < <usize>n; i++) {
      v128.store(variance + (i << 4), v128.load(inverse + ((i * <usize>(b + 1)) << 4)));
    }
  }
  solveBandSides<f64>(band, n, b, sides, nBack + 1);
  setSchur(job, pair);
  const background = ofPair(job, CentringWord.background, pair, nBack);
  solveDense(pointer(job, CentringWord.schur), nBack, background);
  const solution = ofPair(job, CentringWord.solution, pair, n);
  const sideBytes = (<usize>(nBack + 1)) << 4;
  for (let i: usize = 0; i < <usize>n; i++) {
    const side = sides + i * sideBytes;
    let x = v128.load(side);
    for (let q: usize = 0; q < (<usize>nBack) << 4; q += 16) {
      x = f64x2.sub(x, f64x2.mul(v128.load(side + q, 16), v128.load(background + q)));
    }
    v128.store(solution + (i << 4), x);
  }
  evaluate(job, pair, solution, background);
}

/** The normal equations: Σ_rows weight · basis_i · basis_j into the band, and on the other side data and background. */
function addFibres(job: usize, dataPtr: usize): void {
  const nRow = count(job, CentringWord.nRow);
  const nPar = count(job, CentringWord.nPar);
  const nWindow = count(job, CentringWord.nWindow);
  const neighbours = count(job, CentringWord.neighbours);
  const firstPtr = pointer(job, CentringWord.first);
  const basis = pointer(job, CentringWord.basis);
  const weighted = pointer(job, CentringWord.weighted);
  const planeBytes = (<usize>nWindow) << 4;
  const fibreBytes = planeBytes * <usize>nPar;
  for (let k: i32 = 0; k < count(job, CentringWord.nFibre); k++) {
    const first = load<i32>(firstPtr + ((<usize>k) << 4));
    const from = max(0, first);
    const to = min(nRow, first + nWindow);
    weigh(job, basis + <usize>k * fibreBytes, first, from, to);
    for (let m = k; m >= max(0, k - neighbours); m--) {
      const other = load<i32>(firstPtr + ((<usize>m) << 4));
      const start = max(from, other);
      const length = max(0, min(to, other + nWindow) - start);
      const mine = weighted + ((<usize>(start - first)) << 4);
      const theirs = basis + <usize>m * fibreBytes + ((<usize>(start - other)) << 4);
      if (nPar == 3) dots3(mine, theirs, planeBytes, length, pointer(job, CentringWord.sums));
      else dots2(mine, theirs, planeBytes, length, pointer(job, CentringWord.sums));
      placeSums(job, k, m);
    }
    project(job, k, first, from, max(from, to), dataPtr);
  }
}

/** weight · basis on the rows of one fibre's window. */
function weigh(job: usize, basis: usize, first: i32, from: i32, to: i32): void {
  const planeBytes = (<usize>count(job, CentringWord.nWindow)) << 4;
  const weight = pointer(job, CentringWord.weight);
  const weighted = pointer(job, CentringWord.weighted);
  for (let p: usize = 0; p < <usize>count(job, CentringWord.nPar); p++) {
    for (let y = from; y < to; y++) {
      const at = p * planeBytes + ((<usize>(y - first)) << 4);
      v128.store(weighted + at, f64x2.mul(v128.load(weight + ((<usize>y) << 4)), v128.load(basis + at)));
    }
  }
}

/** All products of three planes with three, [3][3]. */
function dots3(a: usize, b: usize, planeBytes: usize, length: i32, outPtr: usize): void {
  let s00 = f64x2.splat(0);
  let s01 = s00;
  let s02 = s00;
  let s10 = s00;
  let s11 = s00;
  let s12 = s00;
  let s20 = s00;
  let s21 = s00;
  let s22 = s00;
  for (let i: i32 = 0; i < length; i++) {
    const b0 = v128.load(b);
    const b1 = v128.load(b + planeBytes);
    const b2 = v128.load(b + 2 * planeBytes);
    const a0 = v128.load(a);
    s00 = f64x2.add(s00, f64x2.mul(a0, b0));
    s01 = f64x2.add(s01, f64x2.mul(a0, b1));
    s02 = f64x2.add(s02, f64x2.mul(a0, b2));
    const a1 = v128.load(a + planeBytes);
    s10 = f64x2.add(s10, f64x2.mul(a1, b0));
    s11 = f64x2.add(s11, f64x2.mul(a1, b1));
    s12 = f64x2.add(s12, f64x2.mul(a1, b2));
    const a2 = v128.load(a + 2 * planeBytes);
    s20 = f64x2.add(s20, f64x2.mul(a2, b0));
    s21 = f64x2.add(s21, f64x2.mul(a2, b1));
    s22 = f64x2.add(s22, f64x2.mul(a2, b2));
    a += 16;
    b += 16;
  }
  v128.store(outPtr, s00);
  v128.store(outPtr, s01, 16);
  v128.store(outPtr, s02, 32);
  v128.store(outPtr, s10, 48);
  v128.store(outPtr, s11, 64);
  v128.store(outPtr, s12, 80);
  v128.store(outPtr, s20, 96);
  v128.store(outPtr, s21, 112);
  v128.store(outPtr, s22, 128);
}

/** All products of two planes with two, [2][2]. */
function dots2(a: usize, b: usize, planeBytes: usize, length: i32, outPtr: usize): void {
  let s00 = f64x2.splat(0);
  let s01 = s00;
  let s10 = s00;
  let s11 = s00;
  for (let i: i32 = 0; i < length; i++) {
    const b0 = v128.load(b);
    const b1 = v128.load(b + planeBytes);
    const a0 = v128.load(a);
    const a1 = v128.load(a + planeBytes);
    s00 = f64x2.add(s00, f64x2.mul(a0, b0));
    s01 = f64x2.add(s01, f64x2.mul(a0, b1));
    s10 = f64x2.add(s10, f64x2.mul(a1, b0));
    s11 = f64x2.add(s11, f64x2.mul(a1, b1));
    a += 16;
    b += 16;
  }
  v128.store(outPtr, s00);
  v128.store(outPtr, s01, 16);
  v128.store(outPtr, s10, 32);
  v128.store(outPtr, s11, 48);
}

/** Products of fibre k's terms with fibre m's to their places in the band. */
function placeSums(job: usize, k: i32, m: i32): void {
  const nPar = count(job, CentringWord.nPar);
  const rowEntries = nPar * (count(job, CentringWord.neighbours) + 1);
  const band = pointer(job, CentringWord.band);
  let from = pointer(job, CentringWord.sums);
  for (let i = k * nPar; i < (k + 1) * nPar; i++) {
    for (let j = m * nPar; j < (m + 1) * nPar; j++) {
      if (j <= i) v128.store(band + ((<usize>(i * rowEntries + i - j)) << 4), v128.load(from));
      from += 16;
    }
  }
}

/** Products of fibre k's weighted terms with the data and with each background term. */
function project(job: usize, k: i32, first: i32, from: i32, to: i32, dataPtr: usize): void {
  const nPar = count(job, CentringWord.nPar);
  const nBack = <usize>count(job, CentringWord.nBack);
  const planeBytes = (<usize>count(job, CentringWord.nWindow)) << 4;
  const rowBasis = pointer(job, CentringWord.rowBasis);
  for (let p: i32 = 0; p < nPar; p++) {
    const mine = pointer(job, CentringWord.weighted) + <usize>p * planeBytes;
    const i = <usize>(k * nPar + p);
    const side = pointer(job, CentringWord.sides) + ((i * (nBack + 1)) << 4);
    const border = pointer(job, CentringWord.border) + ((i * nBack) << 4);
    let sum = f64x2.splat(0);
    for (let y = from; y < to; y++) {
      const w = v128.load(mine + ((<usize>(y - first)) << 4));
      sum = f64x2.add(sum, f64x2.mul(w, v128.load(dataPtr + ((<usize>y) << 4))));
    }
    v128.store(side, sum);
    for (let q: usize = 0; q < nBack; q++) {
      sum = f64x2.splat(0);
      for (let y = from; y < to; y++) {
        const w = v128.load(mine + ((<usize>(y - first)) << 4));
        sum = f64x2.add(sum, f64x2.mul(w, v128.load64_splat(rowBasis + ((<usize>y * nBack + q) << 3))));
      }
      v128.store(border + (q << 4), sum);
      v128.store(side + (q << 4), sum, 16);
    }
  }
}

/** The background's own equations, nBack rows of nBack entries and the right-hand side, less what the fibres explain:
 * S − Cᵀ M⁻¹ C and r − Cᵀ M⁻¹ rhs. */
function setSchur(job: usize, pair: i32): void {
  const nRow = count(job, CentringWord.nRow);
  const nBack = <usize>count(job, CentringWord.nBack);
  const n = <usize>(count(job, CentringWord.nFibre) * count(job, CentringWord.nPar));
  const data = ofPair(job, CentringWord.data, pair, nRow);
  const weight = pointer(job, CentringWord.weight);
  const rowBasis = pointer(job, CentringWord.rowBasis);
  const border = pointer(job, CentringWord.border);
  const sides = pointer(job, CentringWord.sides);
  const schur = pointer(job, CentringWord.schur);
  for (let q: usize = 0; q < nBack; q++) {
    for (let r: usize = q; r <= nBack; r++) {
      let sum = f64x2.splat(0);
      for (let y: usize = 0; y < <usize>nRow; y++) {
        const row = rowBasis + ((y * nBack) << 3);
        const other = r < nBack ? v128.load64_splat(row + (r << 3)) : v128.load(data + (y << 4));
        const mine = f64x2.mul(v128.load(weight + (y << 4)), v128.load64_splat(row + (q << 3)));
        sum = f64x2.add(sum, f64x2.mul(mine, other));
      }
      const column = r < nBack ? r + 1 : 0;
      for (let i: usize = 0; i < n; i++) {
        const mine = v128.load(border + ((i * nBack + q) << 4));
        sum = f64x2.sub(sum, f64x2.mul(mine, v128.load(sides + ((i * (nBack + 1) + column) << 4))));
      }
      v128.store(schur + ((q * (nBack + 1) + r) << 4), sum);
      if (r < nBack) v128.store(schur + ((r * (nBack + 1) + q) << 4), sum);
    }
  }
}

/** Gauss elimination of the small positive system `ptr` (n rows of n + 1); a lost pivot drops its unknown. */
function solveDense(ptr: usize, n: i32, xPtr: usize): void {
  const rowBytes = (<usize>(n + 1)) << 4;
  for (let i: i32 = 0; i < n; i++) {
    const row = ptr + <usize>i * rowBytes;
    const inverse = inverseOfPositive(v128.load(row + ((<usize>i) << 4)));
    for (let j = i + 1; j < n; j++) {
      const below = ptr + <usize>j * rowBytes;
      const factor = f64x2.mul(v128.load(below + ((<usize>i) << 4)), inverse);
      for (let k: usize = (<usize>i) << 4; k < rowBytes; k += 16) {
        v128.store(below + k, f64x2.sub(v128.load(below + k), f64x2.mul(factor, v128.load(row + k))));
      }
    }
  }
  for (let i = n - 1; i >= 0; i--) {
    const row = ptr + <usize>i * rowBytes;
    let sum = v128.load(row + ((<usize>n) << 4));
    for (let k = i + 1; k < n; k++) {
      sum = f64x2.sub(sum, f64x2.mul(v128.load(row + ((<usize>k) << 4)), v128.load(xPtr + ((<usize>k) << 4))));
    }
    v128.store(xPtr + ((<usize>i) << 4), f64x2.mul(sum, inverseOfPositive(v128.load(row + ((<usize>i) << 4)))));
  }
}

function inverseOfPositive(x: v128): v128 {
  return v128.and(f64x2.div(f64x2.splat(1), x), f64x2.gt(x, f64x2.splat(0)));
}

/** Background and all fibres' terms on every row. */
function evaluate(job: usize, pair: i32, solution: usize, background: usize): void {
  const nRow = count(job, CentringWord.nRow);
  const nBack = <usize>count(job, CentringWord.nBack);
  const nPar = count(job, CentringWord.nPar);
  const nWindow = count(job, CentringWord.nWindow);
  const model = ofPair(job, CentringWord.model, pair, nRow);
  const firstPtr = pointer(job, CentringWord.first);
  let row = pointer(job, CentringWord.rowBasis);
  for (let y: usize = 0; y < <usize>nRow; y++) {
    let sum = f64x2.splat(0);
    for (let q: usize = 0; q < nBack; q++) {
      sum = f64x2.add(sum, f64x2.mul(v128.load(background + (q << 4)), v128.load64_splat(row)));
      row += 8;
    }
    v128.store(model + (y << 4), sum);
  }
  let basis = pointer(job, CentringWord.basis);
  for (let i: i32 = 0; i < count(job, CentringWord.nFibre) * nPar; i++) {
    const first = load<i32>(firstPtr + ((<usize>(i / nPar)) << 4));
    const x = v128.load(solution + ((<usize>i) << 4));
    for (let y = max(0, first); y < min(nRow, first + nWindow); y++) {
      const at = model + ((<usize>y) << 4);
      const light = f64x2.mul(x, v128.load(basis + ((<usize>(y - first)) << 4)));
      v128.store(at, f64x2.add(v128.load(at), light));
    }
    basis += (<usize>nWindow) << 4;
  }
}
