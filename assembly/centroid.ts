/** Flux-weighted centroid in a window about a guess, fractional edge pixels included: Σ f·y·d ÷ Σ f·d. */

/** One round over the window [centre − halfWidth, centre + halfWidth]; pixel y covers [y − ½, y + ½], and the part f
 * of a pixel inside the window counts at the middle of that part.
 * `dataPtr`, `goodPtr`: n f64 and n f64 (1 good, 0 left out). NaN when no positive light is in the window. */
export function centroid(dataPtr: usize, goodPtr: usize, n: i32, centre: f64, halfWidth: f64, background: f64): f64 {
  const from = centre - halfWidth;
  const to = centre + halfWidth;
  const first = max(0, <i32>Math.floor(from + 0.5));
  const last = min(n - 1, <i32>Math.floor(to + 0.5));
  let light: f64 = 0;
  let moment: f64 = 0;
  for (let y = first; y <= last; y++) {
    const low = max(from, <f64>y - 0.5);
    const high = min(to, <f64>y + 0.5);
    if (high <= low) continue;
    const at = (<usize>y) << 3;
    const part = (high - low) * load<f64>(goodPtr + at) * (load<f64>(dataPtr + at) - background);
    light += part;
    moment += part * (0.5 * (low + high) - centre);
  }
  return light > 0 ? centre + moment / light : NaN;
}
