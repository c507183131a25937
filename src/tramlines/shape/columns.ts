/** Which columns of a flat make a profile, and which judge it: never the same. */

/** Neighbouring columns that judge together: what they share is the profile's fault, and stands out of their noise. */
const groupColumns = 4;
/** At most so many groups, and at most a quarter of the columns. */
const mostGroups = 20;

/** Groups of columns that are held out of the fit of every profile model. */
export function judgingColumns(nx: number): number[][] {
  const n = Math.min(mostGroups, Math.floor(nx / (4 * groupColumns)));
  return Array.from({ length: n }, (_, i) => {
    const first = Math.floor(((i + 0.6) * nx) / n);
    return Array.from({ length: groupColumns }, (_, j) => first + j);
  });
}

/** `n` columns spread evenly, another set each round, none at the very ends and none that judges. */
export function fittingColumns(nx: number, n: number, round: number): number[] {
  const judging = new Set(judgingColumns(nx).flat());
  const step = nx / n;
  const offset = ((round * 0.38) % 1) * 0.8 + 0.1;
  return Array.from({ length: n }, (_, i) => {
    let x = Math.min(nx - 1, Math.floor((i + offset) * step));
    while (judging.has(x)) x--;
    return x;
  });
}
