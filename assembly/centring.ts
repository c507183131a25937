/** Joint linearised centring of all fibres in a column, weighted by the variance of its own model. Light near fibre k, whose
 * centre is thought at y_k with width σ_k, is modelled as
 *
 *     a P(y − y_k) + u ∂P/∂y_k + s ∂P/∂σ_k,      u = a·δ (shift),  s = a·δσ (widening; only when nPar = 3)
 *
 * over a background Σ b_q P_q, Legendre in the row. P is the Gaussian integrated over pixels. Linear in (a, u, s) of
 * all fibres, neighbours within `neighbours` places coupled: a banded system bordered by the few background columns,
 * which are eliminated through their Schur complement. The twin is src/reference/centring.ts.
 *
 * A tile is two columns at once, one a lane; src/kernels/centring-words.ts draws the job.
 *
 *     unknowns of the band:   a_0 u_0 (s_0) a_1 u_1 (s_1) …      half-bandwidth nPar · (neighbours + 1) − 1 */
import { CentringWord } from "../src/kernels/centring-words";
import { fillBasis } from "./centringBasis";
import { count, ofPair } from "./centringJob";
import { solve } from "./centringSystem";
import { addMisfit, rejectPixels, setWeights } from "./centringWeights";

/** Centres one pair of columns. An unknown without light comes out as 0, variance 0. */
export function centreColumns(job: usize, tile: i32): void {
  const pair = tile * count(job, CentringWord.pairStep);
  const model = ofPair(job, CentringWord.model, pair, count(job, CentringWord.nRow));
  const nRound = count(job, CentringWord.nRound);
  fillBasis(job, pair);
  for (let round = 1; round <= nRound; round++) {
    if (round == nRound && count(job, CentringWord.reject) != 0) rejectPixels(job, pair);
    setWeights(job, pair, model);
    solve(job, pair, round == nRound);
  }
  addMisfit(job, pair);
}
