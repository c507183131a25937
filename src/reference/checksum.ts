/** The ones'-complement sum behind FITS checksums (FITS Standard 4.0, appendix J), and pixels made big-endian on the way out. */

/** 128 bytes of 255 stay below 2¹⁶, so that two columns of bytes fit side by side into one 32-bit sum. */
const LANE_WORDS = 128;

/** The sum of the big-endian 32-bit words of `bytes` (padded with zeros to whole words) added to `start`. Returns an unsigned
 * 32-bit number. */
export function checksum(bytes: Uint8Array, start = 0): number {
  const aligned = bytes.byteOffset % 4 === 0 ? bytes : new Uint8Array(bytes);
  const nWords = aligned.length >> 2;
  const words = new Uint32Array(aligned.buffer, aligned.byteOffset, nWords);
  // Each of the four byte columns is summed exactly, two at a time; only then are they put together.
  const column = new Float64Array(4);
  for (let from = 0; from < nWords; from += LANE_WORDS) {
    const to = Math.min(from + LANE_WORDS, nWords);
    let even = 0;
    let odd = 0;
    for (let i = from; i < to; i++) {
      even += words[i] & 0x00ff00ff;
      odd += (words[i] >>> 8) & 0x00ff00ff;
    }
    column[0] += even & 0xffff;
    column[1] += odd & 0xffff;
    column[2] += even >>> 16;
    column[3] += odd >>> 16;
  }
  // Column 0 is the lowest byte as a little-endian machine reads it: the first in the file. Big-endian: the last.
  if (!LITTLE_ENDIAN) column.reverse();
  for (let i = 4 * nWords; i < aligned.length; i++) column[i & 3] += aligned[i];
  let sum = start;
  for (let i = 0; i < 4; i++) sum = fold(sum + fold(column[i] * 2 ** (24 - 8 * i)));
  return sum;
}

const LITTLE_ENDIAN = new Uint8Array(new Uint32Array([1]).buffer)[0] === 1;

/** Ones'-complement sum of two sums. */
export function addChecksums(a: number, b: number): number {
  return fold(a + b);
}

function fold(sum: number): number {
  let folded = sum;
  while (folded > 0xffffffff) folded = (folded % 2 ** 32) + Math.floor(folded / 2 ** 32);
  return folded;
}

/** Turns the numbers of 1, 2, 4 or 8 bytes (`width`) that fill `bytes` about, in place, from this machine's order to
 * big-endian, and with them the highest bit of each where `unsigned`: a number less 2ⁿ⁻¹ is the same bits with that one
 * turned. */
export function toBigEndian(bytes: Uint8Array, width: number, unsigned: boolean): void {
  for (let at = 0; at < bytes.length; at += width) {
    if (LITTLE_ENDIAN) {
      for (let i = 0; i < width >> 1; i++) {
        const held = bytes[at + i];
        bytes[at + i] = bytes[at + width - 1 - i];
        bytes[at + width - 1 - i] = held;
      }
    }
    if (unsigned) bytes[at] ^= 0x80;
  }
}
