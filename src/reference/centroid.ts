/** Flux-weighted centroid in a window about a guess, fractional edge pixels included: Σ f·y·d ÷ Σ f·d. */

/** One round over the window [centre − halfWidth, centre + halfWidth]; pixel y covers [y − ½, y + ½], and the part f
 * of a pixel inside the window counts at the middle of that part.
 * `data`, `good` (1 good, 0 left out): [n]. NaN when no positive light is in the window. */
export function centroid(
  data: ArrayLike<number>,
  good: ArrayLike<number>,
  centre: number,
  halfWidth: number,
  background: number,
): number {
  const from = centre - halfWidth;
  const to = centre + halfWidth;
  let light = 0;
  let moment = 0;
  for (let y = 0; y < data.length; y++) {
    const low = Math.max(from, y - 0.5);
    const high = Math.min(to, y + 0.5);
    if (high <= low) continue;
    const part = (high - low) * good[y] * (data[y] - background);
    light += part;
    moment += part * (0.5 * (low + high) - centre);
  }
  return light > 0 ? centre + moment / light : Number.NaN;
}
