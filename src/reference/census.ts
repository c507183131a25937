/** What values an image holds, in a few numbers, for the question whether a detector can have written it. */

export interface Census {
  /** Values that are neither NaN nor ±Infinity; the other numbers are of these. */
  nFinite: number;
  nNegative: number;
  /** Not whole. */
  nFraction: number;
  /** ±Infinity where none is finite. */
  lowest: number;
  highest: number;
}

export function census(data: Float32Array | Float64Array): Census {
  const found = { nFinite: 0, nNegative: 0, nFraction: 0, lowest: Infinity, highest: -Infinity };
  for (let i = 0; i < data.length; i++) {
    const value = data[i];
    if (!Number.isFinite(value)) continue;
    found.nFinite++;
    if (value < 0) found.nNegative++;
    if (value !== Math.floor(value)) found.nFraction++;
    if (value < found.lowest) found.lowest = value;
    if (value > found.highest) found.highest = value;
  }
  return found;
}
