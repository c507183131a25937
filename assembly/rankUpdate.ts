/** N += Σ_i w_i g_i g_iᵀ on the lower triangle: what least squares with many unknowns spends its time on. Four rows of G
 * at a time, two unknowns a v128. */

/** `gPtr`: nRow × n f64, n even; `weightPtr`: nRow f64; `outPtr`: n × n f64, of which columns 0 … row are kept up. */
export function rankUpdate(gPtr: usize, weightPtr: usize, nRow: i32, n: i32, outPtr: usize): void {
  const rowBytes = (<usize>n) << 3;
  let row: i32 = 0;
  for (; row + 4 <= nRow; row += 4) {
    const g = gPtr + <usize>row * rowBytes;
    const w = weightPtr + ((<usize>row) << 3);
    for (let r: i32 = 0; r < n; r++) {
      const at = g + ((<usize>r) << 3);
      const a0 = load<f64>(w) * load<f64>(at);
      const a1 = load<f64>(w, 8) * load<f64>(at + rowBytes);
      const a2 = load<f64>(w, 16) * load<f64>(at + 2 * rowBytes);
      const a3 = load<f64>(w, 24) * load<f64>(at + 3 * rowBytes);
      if (a0 == 0.0 && a1 == 0.0 && a2 == 0.0 && a3 == 0.0) continue;
      addFour(
        outPtr + <usize>r * rowBytes,
        g,
        rowBytes,
        r,
        f64x2.splat(a0),
        f64x2.splat(a1),
        f64x2.splat(a2),
        f64x2.splat(a3),
      );
    }
  }
  for (; row < nRow; row++) {
    const g = gPtr + <usize>row * rowBytes;
    for (let r: i32 = 0; r < n; r++) {
      const a = load<f64>(weightPtr + ((<usize>row) << 3)) * load<f64>(g + ((<usize>r) << 3));
      if (a == 0.0) continue;
      addOne(outPtr + <usize>r * rowBytes, g, r, f64x2.splat(a));
    }
  }
}

function addFour(out: usize, g: usize, rowBytes: usize, r: i32, a0: v128, a1: v128, a2: v128, a3: v128): void {
  const end = (<usize>(r + 2) & ~1) << 3; // whole pairs up to the diagonal
  for (let at: usize = 0; at < end; at += 16) {
    let sum = v128.load(out + at);
    sum = f64x2.add(sum, f64x2.mul(a0, v128.load(g + at)));
    sum = f64x2.add(sum, f64x2.mul(a1, v128.load(g + rowBytes + at)));
    sum = f64x2.add(sum, f64x2.mul(a2, v128.load(g + 2 * rowBytes + at)));
    sum = f64x2.add(sum, f64x2.mul(a3, v128.load(g + 3 * rowBytes + at)));
    v128.store(out + at, sum);
  }
}

function addOne(out: usize, g: usize, r: i32, a: v128): void {
  const end = (<usize>(r + 2) & ~1) << 3;
  for (let at: usize = 0; at < end; at += 16) {
    v128.store(out + at, f64x2.add(v128.load(out + at), f64x2.mul(a, v128.load(g + at))));
  }
}
