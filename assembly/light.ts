/** Light of the fibres on the rows, in lanes: in the windows (Word.model), and of the far wings beside them (Word.wingLight).
 * src/reference/light.ts is the same for one column.
 *
 *     rows:      · · · wing · · · | · · · window · · · | · · · wing · · ·
 *     weights:   one number for four columns | one a column | one number for four columns */
import { count, pointer, Word, windowOffset, windowRows } from "./job";
import { loadSpread } from "./lanes";

/** Adds the light of `flux` of fibre k to the rows of its window. */
export function addWindowLight<T extends number>(model: usize, weights: usize, windowBytes: usize, flux: v128): void {
  for (let at: usize = 0; at < windowBytes; at += 16) {
    v128.store(model + at, v128.add<T>(v128.load(model + at), v128.mul<T>(flux, v128.load(weights + at))));
  }
}

/** Adds the light of `flux` of fibre k beside its window, which begins `first` bytes into the lane rows. */
export function addWingLight<T extends number>(job: usize, k: i32, first: usize, flux: v128): void {
  const wing = count(job, Word.wing);
  if (wing == 0) return;
  const wingBytes = (<usize>wing) << 4;
  let weightAt = pointer(job, Word.wingWeights) + <usize>k * 2 * <usize>wing * sizeof<T>();
  let rowAt = pointer(job, Word.wingLight) + first - wingBytes;
  for (let side: i32 = 0; side < 2; side++) {
    for (let at: usize = 0; at < wingBytes; at += 16) {
      const light = v128.mul<T>(flux, loadSpread<T>(weightAt));
      v128.store(rowAt + at, v128.add<T>(v128.load(rowAt + at), light));
      weightAt += sizeof<T>();
    }
    rowAt += wingBytes + ((<usize>windowRows(job)) << 4);
  }
}

/** The light of fibres k0 … k1 − 1 with the fluxes in Word.fluxes, onto rows that hold none yet. */
export function addLight<T extends number>(job: usize, k0: i32, k1: i32, wings: bool): void {
  const model = pointer(job, Word.model);
  const fluxes = pointer(job, Word.fluxes);
  const windowBytes = (<usize>windowRows(job)) << 4;
  let weights = pointer(job, Word.weights) + <usize>k0 * windowBytes;
  for (let k = k0; k < k1; k++) {
    const flux = v128.load(fluxes + ((<usize>k) << 4));
    const first = windowOffset(job, k);
    addWindowLight<T>(model + first, weights, windowBytes, flux);
    if (wings) addWingLight<T>(job, k, first, flux);
    weights += windowBytes;
  }
}
