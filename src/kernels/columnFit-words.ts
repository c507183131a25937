/** Where the kernel that fits sampled columns finds what it needs: a block of 32-bit words, counts and pointers (0: absent),
 * and a few doubles. AssemblyScript reads this same file. A group is four neighbouring columns, one in each f32 lane of a
 * v128; a lane row is one v128 a detector row, `nRow` = ny + 2·margin of them, margin = nWindow + 2. */
export enum ColumnWord {
  nx,
  ny,
  nFibre,
  nWindow, // rows of a whole profile
  nCore, // rows in the middle of it that the normal equations look at
  bandwidth, // how many fibres further a core still meets
  nTrace,
  nWidth,
  nPoint, // of the table
  nX,
  nY, // orders of the background
  nRound,
  wantShift, // 1: local shifts too
  wantBackground, // 1: normal equations of the background too
  groups, // i32: the group that each tile fits

  // the sample
  firstColumn, // i32, nGroup
  light, // v128, nGroup × ny, e⁻; NaN where a pixel is not good
  bandOfRow, // u8, ny, or absent
  nBand,
  fixed, // v128, e⁻²: nGroup × nBand, or nGroup × ny where bands are absent
  perElectron, // v128, nGroup × ny, e⁻² per e⁻, or absent: 1
  rowPolynomials, // f32, ny × mostY

  // the fibres
  trace, // f64, nFibre × nTrace
  width, // f64, nFibre × nWidth
  tells, // u8, nFibre: 1 where the fibre's light may tell its place
  table, // f32, nPoint × 16: C_0 … C_6, 0, then their slopes times the step
  background, // f64, nX × nY

  // what is found, for each group
  flux, // v128, nGroup × nFibre
  fluxVariance,
  shift,
  shiftVariance,
  residual, // v128, nGroup × ny, or absent
  normal, // v128, nGroup × mostY·(mostY + 3)/2: lower triangle row by row, then the right-hand side

  // scratch of one thread
  start, // i32, nFibre: first row of the window
  weights, // v128, nFibre × nWindow
  slopes, // v128, nFibre × nWindow: derivatives by the centre
  edges, // v128, 2: C and its slope at the last edge
  series, // f64: basis of a group
  seriesLanes, // v128, mostY
  level, // lane rows: light less background
  under,
  model,
  rest, // level − model
  inverseVariance,
  weighted, // v128, 2·nWindow
  band, // v128, nFibre × (bandwidth + 1)
  step, // v128, nFibre
  localBand, // v128, 2·nFibre × (2·bandwidth + 2)
  localInverse,
  localRhs, // v128, 2·nFibre
  projected, // v128, mostY × nFibre
  solved,

  numbers,
  count,
}

export enum ColumnNumber {
  /** The table's first point and step, σ at the reference, then the centroid's seven terms. */
  tableStart,
  tableStep,
  referenceWidth,
  centroid,
  /** ε: share of the light nearby by which pixels may miss the model. */
  profileError = 10,
  /** Squared, σ²; 0: nothing is left out. */
  clipSquared,
  count,
}
