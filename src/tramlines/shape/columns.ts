/** Which columns of a flat make a profile, and which judge it: never the same. */

/** At most so many judge, and at most every fourth column. */
const mostJudging = 24;

/** Columns that are held out of the fit of every profile model. */
export function judgingColumns(nx: number): number[] {
  const n = Math.min(mostJudging, Math.floor(nx / 4));
  return Array.from({ length: n }, (_, i) => Math.floor(((i + 0.93) * nx) / n) - 1);
}

/** `n` columns spread evenly, another set each round, none at the very ends and none that judges. */
export function fittingColumns(nx: number, n: number, round: number): number[] {
  const judging = new Set(judgingColumns(nx));
  const step = nx / n;
  const offset = ((round * 0.38) % 1) * 0.8 + 0.1;
  return Array.from({ length: n }, (_, i) => {
    const x = Math.min(nx - 1, Math.floor((i + offset) * step));
    return judging.has(x) ? x - 1 : x;
  });
}
