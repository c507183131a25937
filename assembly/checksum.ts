// The ones'-complement sum behind FITS checksums (FITS Standard 4.0, appendix J), and pixels made big-endian on the way out.
// The reference twin is src/reference/checksum.ts.

/** Sum of the big-endian 32-bit words in `nBytes` at `ptr`, a last part of a word padded with zeros. */
export function checksum(ptr: usize, nBytes: usize): u32 {
  const vectorEnd: usize = nBytes & ~15;
  let low = i64x2.splat(0);
  let high = i64x2.splat(0);
  // Two sums of 64 bits take 2³² words each before they run over: more than a memory holds.
  for (let at: usize = 0; at < vectorEnd; at += 16) {
    const words = swapWords(v128.load(ptr + at));
    low = i64x2.add(low, i64x2.extend_low_i32x4_u(words));
    high = i64x2.add(high, i64x2.extend_high_i32x4_u(words));
  }
  const sums = i64x2.add(low, high);
  let sum: u64 = i64x2.extract_lane(sums, 0) + i64x2.extract_lane(sums, 1);
  for (let at = vectorEnd; at < nBytes; at++) sum += (<u64>load<u8>(ptr + at)) << ((3 - (at & 3)) << 3);
  while (sum >> 32 != 0) sum = (sum & 0xffffffff) + (sum >> 32);
  return <u32>sum;
}

/** Turns `n` numbers of 2, 4 or 8 bytes (`width`) at `ptr` about, in place, and with them the highest bit of each where
 * `unsigned`: a number less 2ⁿ⁻¹ is the same bits with that one turned. */
export function toBigEndian(ptr: usize, n: usize, width: i32, unsigned: bool): void {
  const nBytes: usize = n * <usize>width;
  const vectorEnd: usize = nBytes & ~15;
  const sign = unsigned ? (width == 2 ? i16x8.splat(0x80) : i32x4.splat(0x80)) : i32x4.splat(0);
  for (let at: usize = 0; at < vectorEnd; at += 16) {
    const numbers = v128.load(ptr + at);
    const turned = width == 4 ? swapWords(numbers) : width == 2 ? swapHalves(numbers) : swapDoubles(numbers);
    v128.store(ptr + at, v128.xor(turned, sign));
  }
  for (let at = vectorEnd; at < nBytes; at += width) {
    if (width == 4) store<u32>(ptr + at, bswap<u32>(load<u32>(ptr + at)));
    else if (width == 2) store<u16>(ptr + at, bswap<u16>(load<u16>(ptr + at)));
    else store<u64>(ptr + at, bswap<u64>(load<u64>(ptr + at)));
    if (unsigned) store<u8>(ptr + at, load<u8>(ptr + at) ^ 0x80);
  }
}

function swapHalves(numbers: v128): v128 {
  return i8x16.shuffle(numbers, numbers, 1, 0, 3, 2, 5, 4, 7, 6, 9, 8, 11, 10, 13, 12, 15, 14);
}

/** Bytes of each 32-bit word the other way round. */
export function swapWords(numbers: v128): v128 {
  return i8x16.shuffle(numbers, numbers, 3, 2, 1, 0, 7, 6, 5, 4, 11, 10, 9, 8, 15, 14, 13, 12);
}

function swapDoubles(numbers: v128): v128 {
  return i8x16.shuffle(numbers, numbers, 7, 6, 5, 4, 3, 2, 1, 0, 15, 14, 13, 12, 11, 10, 9, 8);
}
