/** Profiles of a pair of columns and their slopes on the pixels, in lanes: the unknowns' basis of centring.ts, with its twin. */
import { CentringNumber, CentringWord } from "../src/kernels/centring-words";
import { count, number, ofPair, pointer } from "./centringJob";
import { erf } from "./erf";

const sqrtHalf: f64 = Math.SQRT1_2;

const inverseSqrtTwoPi: f64 = 0.3989422804014327;

/** P, ∂P/∂y_k (and ∂P/∂σ_k) on each fibre's window of rows, 0 beyond the reach: basis[(k · nPar + p) · nWindow + i]. */
export function fillBasis(job: usize, pair: i32): void {
  const nFibre = count(job, CentringWord.nFibre);
  const nPar = count(job, CentringWord.nPar);
  const nWindow = count(job, CentringWord.nWindow);
  const reach = f64x2.splat(number(job, CentringNumber.reach));
  const half = f64x2.splat(0.5);
  const planeBytes = (<usize>nWindow) << 4;
  const edges = pointer(job, CentringWord.edges);
  let centrePtr = ofPair(job, CentringWord.centre, pair, nFibre);
  let sigmaPtr = ofPair(job, CentringWord.sigma, pair, nFibre);
  let firstPtr = pointer(job, CentringWord.first);
  let planePtr = pointer(job, CentringWord.basis);
  for (let k: i32 = 0; k < nFibre; k++) {
    const centre = v128.load(centrePtr);
    const step = f64x2.div(f64x2.splat(1), v128.load(sigmaPtr));
    const between = 0.5 * (f64x2.extract_lane(centre, 0) + f64x2.extract_lane(centre, 1));
    const first = <i32>Math.floor(between + 0.5) - (nWindow >> 1);
    store<i32>(firstPtr, first);
    let low = f64x2.sub(f64x2.splat(<f64>first - 0.5), centre);
    fillDensities(low, step, nWindow, edges);
    let lowErf = erfPair(f64x2.mul(low, step));
    for (let at: usize = 0; at < planeBytes; at += 16) {
      const high = f64x2.add(low, f64x2.splat(1));
      const highErf = erfPair(f64x2.mul(high, step));
      const lowDensity = v128.load(edges + at);
      const highDensity = v128.load(edges + at, 16);
      const inside = f64x2.le(f64x2.abs(f64x2.add(low, half)), reach);
      v128.store(planePtr + at, v128.and(inside, f64x2.mul(half, f64x2.sub(highErf, lowErf))));
      v128.store(planePtr + planeBytes + at, v128.and(inside, f64x2.sub(lowDensity, highDensity)));
      if (nPar == 3) {
        const widening = f64x2.mul(step, f64x2.sub(f64x2.mul(low, lowDensity), f64x2.mul(high, highDensity)));
        v128.store(planePtr + 2 * planeBytes + at, v128.and(inside, widening));
      }
      low = high;
      lowErf = highErf;
    }
    centrePtr += 16;
    sigmaPtr += 16;
    firstPtr += 16;
    planePtr += planeBytes * <usize>nPar;
  }
}

/** The Gaussian's density at the pixels' edges, the first of them `low` pixels from the centre, h = 1/σ apart: outward from the
 * middle one, g(v ± h) = g(v) q with q = exp(∓v h − h²/2), which shrinks by exp(−h²) from step to step. */
function fillDensities(low: v128, h: v128, nWindow: i32, edges: usize): void {
  const middle = nWindow >> 1;
  const v = f64x2.mul(f64x2.add(low, f64x2.splat(<f64>middle)), h);
  const halfSquare = f64x2.mul(f64x2.splat(0.5), f64x2.mul(h, h));
  const shrink = expPair(f64x2.mul(f64x2.splat(-2), halfSquare));
  const start = f64x2.mul(
    f64x2.mul(f64x2.splat(inverseSqrtTwoPi), h),
    expPair(f64x2.mul(f64x2.splat(-0.5), f64x2.mul(v, v))),
  );
  let up = expPair(f64x2.neg(f64x2.add(f64x2.mul(v, h), halfSquare)));
  let down = f64x2.div(shrink, up);
  let g = start;
  v128.store(edges + ((<usize>middle) << 4), g);
  for (let i = middle + 1; i <= nWindow; i++) {
    g = f64x2.mul(g, up);
    up = f64x2.mul(up, shrink);
    v128.store(edges + ((<usize>i) << 4), g);
  }
  g = start;
  for (let i = middle - 1; i >= 0; i--) {
    g = f64x2.mul(g, down);
    down = f64x2.mul(down, shrink);
    v128.store(edges + ((<usize>i) << 4), g);
  }
}

function expPair(x: v128): v128 {
  return f64x2(Math.exp(f64x2.extract_lane(x, 0)), Math.exp(f64x2.extract_lane(x, 1)));
}

/** erf(v/√2) */
function erfPair(v: v128): v128 {
  return f64x2(erf(f64x2.extract_lane(v, 0) * sqrtHalf), erf(f64x2.extract_lane(v, 1) * sqrtHalf));
}
