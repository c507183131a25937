/** Where assembly/legendre.ts finds what it needs: one block of 32-bit words. AssemblyScript reads this same file, so that both
 * sides of the door count alike. Pointers are byte offsets into the memory.
 *
 * Series go in pairs, one a lane: [pair][point][lane], doubles. */
export enum LegendreWord {
  nPoint,
  nCoef,
  /** Turns in which points may be left out. */
  maxRounds,
  kappa, // pointer to one double
  t, // nPoint, not in lanes
  basis, // nPoint × nCoef, not in lanes
  y, // nPair × nPoint
  weight, // nPair × nPoint; set to 0 for a point that is left out
  coef, // nPair × nCoef

  // scratch of one thread, in lanes
  given, // nPoint: the weights as they were
  residual, // nPoint
  sorted, // nPoint, not in lanes
  normal, // nCoef × nCoef
  side, // nCoef
  count,
}
