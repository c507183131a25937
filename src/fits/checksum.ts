/** The FITS checksum (FITS Standard 4.0, appendix J): the 32-bit ones'-complement sum of an HDU's bytes, taken as
 * big-endian words. DATASUM holds the sum of the data as a decimal string; CHECKSUM is chosen so that
 * the sum over the whole HDU is −0 (all bits set). */
export { addChecksums, checksum } from "../reference/checksum.js";

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
