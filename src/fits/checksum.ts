/** The FITS checksum (FITS Standard 4.0, appendix J): the 32-bit ones'-complement sum of an HDU's bytes, taken as
 * big-endian words. DATASUM holds the sum of the data as a decimal string; CHECKSUM is chosen so that
 * the sum over the whole HDU is −0 (all bits set). */

/** 128 bytes of 255 stay below 2¹⁶, so that two columns of bytes fit side by side into one 32-bit sum. */
const LANE_WORDS = 128;

/** The sum of `bytes` (padded with zeros to whole words) added to `start`. Returns an unsigned 32-bit number. */
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

/** Sixteen letters and digits whose own sum, from column 12 of a card, is the complement of `sum`. */
export function encodeChecksum(sum: number): string {
  const complement = ~sum >>> 0;
  const characters = new Array<number>(16);
  for (let byte = 0; byte < 4; byte++) {
    const value = (complement >>> (24 - 8 * byte)) & 0xff;
    const quarters = spread(value);
    for (let j = 0; j < 4; j++) characters[4 * j + byte] = quarters[j];
  }
  // The value starts in column 12, one byte past a word: rotate right by one.
  return String.fromCharCode(characters[15], ...characters.slice(0, 15));
}

/** Four characters, '0' upwards, that add up to `value` + 4·48 and are letters or digits. */
function spread(value: number): number[] {
  const quarter = value >> 2;
  const characters = [quarter + (value & 3), quarter, quarter, quarter].map((part) => part + 48);
  const bad = (code: number) => (code >= 0x3a && code <= 0x40) || (code >= 0x5b && code <= 0x60);
  while (characters.some(bad)) {
    for (let pair = 0; pair < 4; pair += 2) {
      if (bad(characters[pair]) || bad(characters[pair + 1])) {
        characters[pair]++;
        characters[pair + 1]--;
      }
    }
  }
  return characters;
}
