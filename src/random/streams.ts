/** Streams of random numbers, one for each ingredient of a frame.
 *
 * A stream is named by words and numbers (`["sci_01", "cosmic rays"]`); the same seed and the same name give the
 * same numbers, whatever other streams were used: leaving out the cosmic rays does not move the read noise. The name is
 * hashed with FNV-1a (Fowler, Noll & Vo; offset and prime of IETF draft-eastlake-fnv) and finished with the mixer of
 * SplitMix32-like generators; the generator is pure-rand's xoroshiro128+. */
import { xoroshiro128plusFromState } from "pure-rand/generator/xoroshiro128plus";

export interface Stream {
  /** Uniform in [0, 1), a multiple of 2⁻⁵³. */
  uniform(): number;
  /** Normal with mean 0 and standard deviation 1, by the polar method (Marsaglia & Bray 1964, SIAM Review 6, 260). */
  normal(): number;
}

/** The stream of that name under `seed`, an integer. */
export function openStream(seed: number, ...name: (string | number)[]): Stream {
  const label = [seed, ...name].join("\u0000");
  const state = [0, 1, 2, 3].map((word) => mix(fnv1a(`${word}\u0000${label}`)));
  const generator = xoroshiro128plusFromState(state);
  const uniform = () => ((generator.next() >>> 5) * 67108864 + (generator.next() >>> 6)) / 9007199254740992;
  let spare = Number.NaN;
  const normal = () => {
    if (!Number.isNaN(spare)) {
      const kept = spare;
      spare = Number.NaN;
      return kept;
    }
    for (;;) {
      const a = 2 * uniform() - 1;
      const b = 2 * uniform() - 1;
      const square = a * a + b * b;
      if (square >= 1 || square === 0) continue;
      const stretch = Math.sqrt((-2 * Math.log(square)) / square);
      spare = b * stretch;
      return a * stretch;
    }
  };
  return { uniform, normal };
}

function fnv1a(text: string): number {
  let hash = 0x811c9dc5;
  for (const byte of new TextEncoder().encode(text)) hash = Math.imul(hash ^ byte, 0x01000193);
  return hash;
}

/** Spreads every bit of the hash over the word: FNV-1a leaves its last byte in the low bits. */
function mix(word: number): number {
  let z = (word + 0x9e3779b9) | 0;
  z = Math.imul(z ^ (z >>> 16), 0x21f0aaad);
  z = Math.imul(z ^ (z >>> 15), 0x735a2d97);
  return z ^ (z >>> 15);
}
