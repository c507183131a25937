/** Where assembly/centring.ts finds what it needs: one block of 32-bit words, then one of doubles. AssemblyScript reads this
 * same file, so that both sides of the door count alike. Pointers are byte offsets into the memory.
 *
 * Columns go in pairs, one a lane: an array of `rows` holds nPair × nRow × 2 doubles, [pair][row][lane], and one of `fibres`
 * or `unknowns` nFibre or nFibre · nPar in place of nRow. */
export enum CentringWord {
  nRow,
  nFibre,
  /** 2: light and shift; 3: light, shift and width. */
  nPar,
  neighbours,
  nBack,
  /** Rows of the window that a fibre's light is sought in, an odd number. */
  nWindow,
  /** Tile t works on pair t · pairStep. */
  pairStep,
  /** Solutions, each weighted by the variance of the model before it. */
  nRound,
  /** Not 0: pixels far off the model are left out before the last round and from there on. */
  reject,

  data, // rows
  good, // rows: 1, or 0 for a pixel left out; written too
  fixedVariance, // rows
  variancePerElectron, // rows
  model, // rows; the first round's weights come from what lies here
  centre, // fibres
  sigma, // fibres
  solution, // unknowns
  variance, // unknowns
  background, // nPair × nBack × 2
  misfit, // nPair × 5 × 2: Σ r², Σ v of noise, Σ m², pixels, unknowns
  rowBasis, // nRow × nBack, not in lanes: Legendre polynomials in the row
  numbers,

  // scratch of one thread, all in lanes
  weight, // nRow
  first, // nFibre, i32: where a fibre's window begins
  edges, // nWindow + 1: a density at the pixels' edges
  basis, // nFibre × nPar × nWindow
  weighted, // nPar × nWindow
  sums, // nPar × nPar
  band, // n × (b + 1), n = nFibre · nPar, b = nPar · (neighbours + 1) − 1
  inverse, // n × (b + 1)
  border, // n × nBack
  sides, // n × (nBack + 1): the right-hand side, and the border
  schur, // nBack × (nBack + 1)
  count,
}

/** Doubles of a job. */
export enum CentringNumber {
  /** A fibre's light ends this far from its centre, pixels. */
  reach,
  /** Pixels farther than this from every centre do not count. */
  near,
  /** The profile's own relative error. */
  relativeError,
  /** A pixel is left out at this many σ off the model … */
  kappa,
  /** … σ with this for the profile's error. */
  rejectError,
  count,
}
