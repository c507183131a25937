// L D Lᵀ of symmetric systems of half-bandwidth 2, unrolled: diagonals apart, m0[i] = M[i][i], m1[i] = M[i][i−1],
// m2[i] = M[i][i−2]; after `factor` 1/D, L[i][i−1], L[i][i−2]. The rule for lost pivots is src/reference/banded.ts's.

const smallestPivotShare = 1e-8;

export function factor(m0, m1, m2, n) {
  let d1 = 0; // 1/D[i−1]
  let d2 = 0; // 1/D[i−2]
  let l1 = 0; // L[i−1][i−2]
  for (let i = 0; i < n; i++) {
    const u2 = m2[i];
    const u1 = m1[i] - u2 * l1;
    const below2 = u2 * d2;
    const below1 = u1 * d1;
    const taken = u1 * below1 + u2 * below2; // neither is negative
    const pivot = m0[i] - taken;
    m2[i] = below2;
    m1[i] = below1;
    const inverse = Math.abs(pivot) > smallestPivotShare * (m0[i] + taken) ? 1 / pivot : 0;
    m0[i] = inverse;
    d2 = d1;
    d1 = inverse;
    l1 = below1;
  }
}

/** x from the factors; `x` holds the right-hand side. */
export function solve(d, l1, l2, n, x) {
  let before = 0;
  let further = 0;
  for (let i = 0; i < n; i++) {
    const y = x[i] - l1[i] * before - l2[i] * further;
    x[i] = y;
    further = before;
    before = y;
  }
  let a1 = 0; // x[i+1]
  let a2 = 0; // x[i+2]
  let p1 = 0; // L[i+1][i]
  let p2 = 0; // L[i+1][i−1]
  let q2 = 0; // L[i+2][i]
  for (let i = n - 1; i >= 0; i--) {
    const value = x[i] * d[i] - p1 * a1 - q2 * a2;
    x[i] = value;
    a2 = a1;
    a1 = value;
    q2 = p2;
    p1 = l1[i];
    p2 = l2[i];
  }
}

/** Diagonal and first subdiagonal of the inverse (Takahashi's recurrence): s0[i], s1[i] = S[i][i−1]. */
export function invert(d, l1, l2, n, s0, s1) {
  let here = 0; // S[i+1][i+1]
  let above = 0; // S[i+2][i+2]
  let between = 0; // S[i+2][i+1]
  let p1 = 0; // L[i+1][i]
  let q2 = 0; // L[i+2][i]
  let next2 = 0; // L[i+1][i−1]
  for (let i = n - 1; i >= 0; i--) {
    const s2 = -p1 * between - q2 * above; // S[i+2][i]
    const one = -p1 * here - q2 * between; // S[i+1][i]
    const own = d[i] - p1 * one - q2 * s2;
    s0[i] = own;
    if (i + 1 < n) s1[i + 1] = one;
    above = here;
    here = own;
    between = one;
    p1 = l1[i];
    q2 = next2;
    next2 = l2[i];
  }
  s1[0] = 0;
}
