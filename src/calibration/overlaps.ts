/** Counts of pixels handed on to other bins, none lost and none made: each bin is the integral of what the pixels' counts
 * say of the light between them, over the part of each pixel that the bin covers,
 *
 *     F_b = Σ_j W_bj · f_j,    Σ_b W_bj = 1 for every pixel that bins cover wholly.
 *
 * Within pixel j, u from −½ to ½, light is spread
 *     constant    f_j
 *     parabolic   f_j + (f₊ − f₋)/2 · u + (f₊ − 2f_j + f₋)/2 · (u² − 1/12)
 * The parabola has the means of pixel j and of both its neighbours over them (Colella & Woodward 1984, J. Comput. Phys. 54,
 * 174, without their steepening and limits, which are not linear): it broadens lines less, but may swing below 0 beside sharp ones.
 * Both are linear, so that variances and covariances follow exactly:
 *
 *     cov(F_a, F_b) = Σ_j W_aj W_bj V_j + Σ_j (W_aj W_b,j+1 + W_a,j+1 W_bj) C_j,   C_j = cov(f_j, f_j+1) */

export type Reconstruction = "constant" | "parabolic";

/** The rows of W for one fibre. */
export interface Overlaps {
  nBin: number;
  /** The first pixel of each bin: [nBin]. */
  firstPixel: Int32Array;
  /** Where its weights start in `weight`: [nBin + 1]. */
  offset: Int32Array;
  weight: Float64Array;
  /** Share of the bin on which there is no usable pixel: [nBin]. */
  lost: Float64Array;
}

/** `positions`: [nBin + 1] pixel coordinates of the bins' edges, rising or falling; pixel j reaches from j − ½ to j + ½.
 * `usable`: [nx]; pixels that are not bring nothing, and a bin's loss is made good by the rest of it as long as that is no
 * more than `mostLost` of its width; beyond, its weights are none. */
export function overlaps(
  positions: Float64Array,
  usable: Uint8Array,
  reconstruction: Reconstruction,
  mostLost: number,
): Overlaps {
  const nBin = positions.length - 1;
  const rows = {
    nBin,
    firstPixel: new Int32Array(nBin),
    offset: new Int32Array(nBin + 1),
    lost: new Float64Array(nBin),
  };
  const weights: number[] = [];
  for (let b = 0; b < nBin; b++) {
    const low = Math.min(positions[b], positions[b + 1]);
    const high = Math.max(positions[b], positions[b + 1]);
    rows.offset[b] = weights.length;
    const caught = addBin(low, high, usable, reconstruction, weights, (first) => {
      rows.firstPixel[b] = first;
    });
    rows.lost[b] = Math.max(0, 1 - caught / (high - low));
    if (rows.lost[b] < 1e-12) rows.lost[b] = 0;
    else if (!(rows.lost[b] <= mostLost)) weights.length = rows.offset[b];
    else for (let i = rows.offset[b]; i < weights.length; i++) weights[i] /= 1 - rows.lost[b];
  }
  rows.offset[nBin] = weights.length;
  return { ...rows, weight: Float64Array.from(weights) };
}

/** Appends the weights of the pixels under low … high; returns the width of it that usable ones cover, in pixels. */
function addBin(
  low: number,
  high: number,
  usable: Uint8Array,
  reconstruction: Reconstruction,
  weights: number[],
  begin: (firstPixel: number) => void,
): number {
  const nx = usable.length;
  const from = Math.max(0, Math.floor(low + 0.5));
  const to = Math.min(nx - 1, Math.ceil(high - 0.5));
  const margin = reconstruction === "parabolic" ? 1 : 0;
  const first = Math.max(0, from - margin);
  const last = Math.min(nx - 1, to + margin);
  begin(first);
  const at = weights.length - first;
  for (let j = first; j <= last; j++) weights.push(0);
  let caught = 0;
  for (let j = from; j <= to; j++) {
    const u0 = Math.max(low - j, -0.5);
    const u1 = Math.min(high - j, 0.5);
    if (!(u1 > u0) || usable[j] === 0) continue;
    caught += u1 - u0;
    weights[at + j] += u1 - u0;
    // Beside a pixel without a value, and at the ends, the pixel's light is taken as even.
    if (margin === 0 || j === 0 || j === nx - 1 || usable[j - 1] === 0 || usable[j + 1] === 0) continue;
    const slope = (u1 * u1 - u0 * u0) / 4;
    const bend = (u1 * u1 * u1 - u0 * u0 * u0) / 6 - (u1 - u0) / 24;
    weights[at + j - 1] += bend - slope;
    weights[at + j] -= 2 * bend;
    weights[at + j + 1] += bend + slope;
  }
  return caught;
}

/** Bins of one row: [nBin]; NaN where too much is lost. `row`: its pixels; those not usable are not looked at. */
export function rebinRow(rows: Overlaps, row: ArrayLike<number>): Float64Array {
  return Float64Array.from({ length: rows.nBin }, (_, b) => {
    const end = rows.offset[b + 1];
    let sum = end > rows.offset[b] ? 0 : Number.NaN;
    for (let i = rows.offset[b], j = rows.firstPixel[b]; i < end; i++, j++) {
      if (rows.weight[i] !== 0) sum += rows.weight[i] * row[j];
    }
    return sum;
  });
}

/** cov(F_b of `rows`, F_b+distance of `others`), of independent pixels whose covariance in the same column is `same`
 * and, where given, with the next column `next`: [nBin], NaN where one of the two has no value or there is no bin. */
export function rebinCovariance(
  rows: Overlaps,
  others: Overlaps,
  distance: number,
  same: ArrayLike<number>,
  next?: ArrayLike<number>,
): Float64Array {
  return Float64Array.from({ length: rows.nBin }, (_, b) => {
    const c = b + distance;
    if (c >= others.nBin || isEmpty(rows, b) || isEmpty(others, c)) return Number.NaN;
    let sum = 0;
    const end = rows.firstPixel[b] + rows.offset[b + 1] - rows.offset[b];
    for (let j = rows.firstPixel[b]; j < end; j++) {
      const own = weightAt(rows, b, j);
      if (own === 0) continue;
      const there = weightAt(others, c, j);
      if (there !== 0) sum += own * there * same[j];
      if (next === undefined) continue;
      const [before, after] = [weightAt(others, c, j - 1), weightAt(others, c, j + 1)];
      if (before !== 0) sum += own * before * next[j - 1];
      if (after !== 0) sum += own * after * next[j];
    }
    return sum;
  });
}

function isEmpty({ offset }: Overlaps, b: number): boolean {
  return offset[b + 1] === offset[b];
}

function weightAt({ firstPixel, offset, weight }: Overlaps, b: number, j: number): number {
  const i = j - firstPixel[b];
  return i >= 0 && i < offset[b + 1] - offset[b] ? weight[offset[b] + i] : 0;
}
