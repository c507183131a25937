/** Rice-coded differences, the RICE_1 algorithm of FITS Standard 4.0, section 10.4.1: the first pixel as it is, then
 * blocks of `blockSize` differences, each folded to an unsigned number and split into fs low bits and a unary rest. */

/** Bits of the block's header, and the value in it that says "not coded". */
const CODES: Record<number, { headBits: number; most: number }> = {
  1: { headBits: 3, most: 6 },
  2: { headBits: 4, most: 14 },
  4: { headBits: 5, most: 25 },
};

/** `coded` to `n` integers of `pixelBytes` (1 unsigned, 2 or 4 signed) bytes; undefined when `coded` ends early. */
export function unpackRice(
  coded: Uint8Array,
  n: number,
  blockSize: number,
  pixelBytes: 1 | 2 | 4,
): Int32Array | undefined {
  const { headBits, most } = CODES[pixelBytes];
  const bits = new BitReader(coded);
  const pixels = new Int32Array(n);
  const wrap =
    pixelBytes === 1
      ? (v: number) => v & 0xff
      : pixelBytes === 2
        ? (v: number) => (v << 16) >> 16
        : (v: number) => v | 0;
  let last = wrap(bits.take(8 * pixelBytes));
  for (let from = 0; from < n; from += blockSize) {
    const to = Math.min(from + blockSize, n);
    const lowBits = bits.take(headBits) - 1;
    for (let i = from; i < to; i++) {
      let folded = 0;
      if (lowBits === most) folded = bits.take(8 * pixelBytes);
      else if (lowBits >= 0) folded = (bits.zeros() << lowBits) | bits.take(lowBits);
      last = wrap(last + (folded & 1 ? ~(folded >>> 1) : folded >>> 1));
      pixels[i] = last;
    }
    if (bits.overrun) return undefined;
  }
  return pixels;
}

/** Bits from the highest of the first byte on. */
class BitReader {
  private at = 0;
  private held = 0;
  private nHeld = 0;
  overrun = false;

  constructor(private readonly bytes: Uint8Array) {}

  /** The next `n` ≤ 32 bits. */
  take(n: number): number {
    let value = 0;
    let wanted = n;
    while (wanted > 0) {
      if (this.nHeld === 0) this.refill();
      const now = Math.min(wanted, this.nHeld);
      this.nHeld -= now;
      value = (value << now) | ((this.held >>> this.nHeld) & ((1 << now) - 1));
      wanted -= now;
    }
    return value;
  }

  /** How many 0 bits come before the next 1, which is taken too. */
  zeros(): number {
    let n = 0;
    for (;;) {
      if (this.nHeld === 0) this.refill();
      if (this.overrun) return n;
      const rest = this.held & ((1 << this.nHeld) - 1);
      if (rest !== 0) {
        const leading = Math.clz32(rest) - (32 - this.nHeld);
        this.nHeld -= leading + 1;
        return n + leading;
      }
      n += this.nHeld;
      this.nHeld = 0;
    }
  }

  private refill(): void {
    if (this.at >= this.bytes.length) this.overrun = true;
    this.held = this.bytes[this.at++] ?? 0;
    this.nHeld = 8;
  }
}
