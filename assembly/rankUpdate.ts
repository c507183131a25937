/** N ± Σ g gᵀ over rows g: what least squares with many unknowns spends its time on.
 *
 * N is symmetric and lies in blocks of 4 × 4, those on and below the diagonal one after the other, row by row:
 *
 *     0          block I ≥ J:  outPtr + (I·(I + 1)/2 + J)·128,   N[4I + r][4J + c] at (4r + c)·8 in it
 *     1 2
 *     3 4 5
 *
 * A block stays in eight registers while some rows pass, few enough of them to stay in the nearest cache. Rows in which
 * either of its two groups of unknowns is empty, as those far from a fibre are in most of its splines, are passed over. */

const panelRows: i32 = 32;

/** Bytes of N with `nBlock` blocks a side. */
export function blocksBytes(nBlock: i32): usize {
  return ((<usize>nBlock * <usize>(nBlock + 1)) >> 1) << 7;
}

/** `gPtr`: nRow × 4·nBlock f64; `outPtr`: nBlock·(nBlock + 1)/2 blocks, to which sign · Σ g gᵀ is added; `filledPtr`: scratch of
 * nBlock u32. */
export function rankUpdate(gPtr: usize, nRow: i32, nBlock: i32, sign: f64, outPtr: usize, filledPtr: usize): void {
  const rowBytes = (<usize>nBlock) << 5;
  const filledEnd = filledPtr + ((<usize>nBlock) << 2);
  for (let row: i32 = 0; row < nRow; row += panelRows) {
    const panel = gPtr + <usize>row * rowBytes;
    let out = outPtr;
    let a = panel;
    for (let ofA = filledPtr; ofA < filledEnd; ofA += 4) {
      const filled = filledRows(a, min(panelRows, nRow - row), rowBytes);
      store<u32>(ofA, filled);
      let b = panel;
      for (let ofB = filledPtr; ofB <= ofA; ofB += 4) {
        addBlock(a, b, filled & load<u32>(ofB), rowBytes, sign, out);
        b += 32;
        out += 128;
      }
      a += 32;
    }
  }
}

/** A bit for each row, lowest first, that has a number other than 0 in four columns. */
function filledRows(a: usize, nRow: i32, rowBytes: usize): u32 {
  let filled: u32 = 0;
  for (let r: i32 = 0; r < nRow; r++) {
    if (v128.any_true(v128.or(v128.load(a), v128.load(a, 16)))) filled |= (<u32>1) << r;
    a += rowBytes;
  }
  return filled;
}

function addBlock(aPtr: usize, bPtr: usize, rows: u32, rowBytes: usize, sign: f64, out: usize): void {
  let s0 = f64x2.splat(0.0);
  let s1 = s0;
  let s2 = s0;
  let s3 = s0;
  let s4 = s0;
  let s5 = s0;
  let s6 = s0;
  let s7 = s0;
  while (rows != 0) {
    const at = <usize>ctz(rows) * rowBytes;
    rows &= rows - 1;
    const a = aPtr + at;
    const low = v128.load(bPtr + at);
    const high = v128.load(bPtr + at, 16);
    let here = v128.load64_splat(a);
    s0 = f64x2.add(s0, f64x2.mul(here, low));
    s1 = f64x2.add(s1, f64x2.mul(here, high));
    here = v128.load64_splat(a, 8);
    s2 = f64x2.add(s2, f64x2.mul(here, low));
    s3 = f64x2.add(s3, f64x2.mul(here, high));
    here = v128.load64_splat(a, 16);
    s4 = f64x2.add(s4, f64x2.mul(here, low));
    s5 = f64x2.add(s5, f64x2.mul(here, high));
    here = v128.load64_splat(a, 24);
    s6 = f64x2.add(s6, f64x2.mul(here, low));
    s7 = f64x2.add(s7, f64x2.mul(here, high));
  }
  const signs = f64x2.splat(sign);
  v128.store(out, f64x2.add(v128.load(out), f64x2.mul(signs, s0)));
  v128.store(out, f64x2.add(v128.load(out, 16), f64x2.mul(signs, s1)), 16);
  v128.store(out, f64x2.add(v128.load(out, 32), f64x2.mul(signs, s2)), 32);
  v128.store(out, f64x2.add(v128.load(out, 48), f64x2.mul(signs, s3)), 48);
  v128.store(out, f64x2.add(v128.load(out, 64), f64x2.mul(signs, s4)), 64);
  v128.store(out, f64x2.add(v128.load(out, 80), f64x2.mul(signs, s5)), 80);
  v128.store(out, f64x2.add(v128.load(out, 96), f64x2.mul(signs, s6)), 96);
  v128.store(out, f64x2.add(v128.load(out, 112), f64x2.mul(signs, s7)), 112);
}
