/** Where the extraction kernel finds what it needs: one block of 32-bit words, then one of doubles. AssemblyScript reads
 * this same file, so that both sides of the door count alike.
 *
 *     jobPtr → | Word.nx | Word.ny | … | Word.count − 1 |          4 bytes each
 *     Word.numbers → | Numbers.profileError | … |                  8 bytes each
 *
 * Pointers are byte offsets into the memory; 0 means absent. T is the lanes' type, f32 or f64; a lane row is one v128
 * a detector row, `ny + 2·margin` of them, margin = window + wing + 2. What is scratch belongs to one thread: each has a
 * block of words of its own, alike but for those pointers. */
export enum Word {
  nx,
  ny,
  nFibre,
  halfWindow,
  wing, // rows to either side of the window that the far wing reaches; a multiple of 4
  bandwidth,
  blockColumns,
  nTrace,
  nWidth,
  nBackgroundX,
  nBackgroundY,
  method,
  crosstalk,
  reject,
  minRounds,
  maxRounds,
  firstColumn, // columns before this one are left alone; a multiple of 4
  endColumn, // columns from here on too
  fixedRows, // all ones when each lane row has a fixed variance of its own, 0 when the first holds for all
  keepReach, // whether lane rows of reach are wanted

  // the frame: ny × nx
  electrons, // f32
  mask, // u8
  rejected, // u8, written too
  bandOfRow, // u8, ny
  fixedVariance, // f32, nBand × nx
  fixedVarianceImage, // f32 or absent
  inverseResponse, // f32 or absent
  responseRelativeVariance, // f32 or absent

  // the fibres
  trace, // f64, nFibre × nTrace
  width, // f64, nFibre × nWidth
  seen, // i32, nFibre × 2
  outputRow, // i32, nFibre: row of the images below
  shape, // f64, a table as assembly/shape.ts draws it; absent: Gaussians
  background, // f64, nX × nY

  // the spectra: nSlit × nx
  flux, // T
  variance, // T
  neighbourCovariance, // T
  flags, // i32
  chi2, // T
  backgroundUnder, // T
  fitFlux, // T, of the joint fit whatever the method

  // scratch of one thread
  start, // i32, nFibre
  tileElectrons, // f32, ny × 16
  tileBits, // u8, ny × 16
  tileSpectra, // T, 6 × nFibre × 16
  tileFlags, // i32, nFibre × 16
  shapeTable, // f64, 8 a point; for Gaussians 8 a cell of erf
  needed, // u8, nFibre: whose profiles are wanted
  nodeCentre, // T, nFibre × nNode
  nodeWeights, // T, nFibre × nNode × nWindow
  wideWeights, // T, nWindow + 2·wing
  wingNodes, // T, nFibre × 2 × 2·wing: below the window, then above it
  wingWeights, // T, nFibre × 2·wing
  fibreOfRow, // i32, a lane row: the first fibre whose window ends above it
  nodeShares, // T, nNode × blockColumns
  rowPolynomials, // T, ny × nY
  backgroundSeries, // f64, nY × lanes
  bits, // u32, a byte a lane
  suspects, // u32, a byte a lane
  candidates, // i32, a lane row
  activeChunks, // v128, nChunk
  nextChunks, // v128, nChunk
  light, // lane rows from here on
  backgroundRows,
  fixed,
  inverseResponseRows,
  responseVarianceRows,
  inverseVariance,
  model, // of the windows
  wingLight, // of the far wings
  net, // light − wingLight
  reach,
  crowd, // Σ of all weights on the row
  chiSquare, // excess² · inverse variance
  weights, // v128, nFibre × nWindow
  aperture, // v128, nFibre × nWindow
  weighted, // v128, nWindow
  centre, // v128, nFibre, and so on:
  fluxes,
  solution,
  lastChange,
  variances,
  covariancesBelow,
  raw,
  band, // v128, nFibre × (bandwidth + 1)
  normal,
  inverse,
  rawCovariance,
  crosstalkBand, // v128, nFibre × (2·bandwidth + 1)
  system, // v128, 2·nFibre × (2·bandwidth + 2)
  systemInverse,
  systemRhs, // v128, 2·nFibre
  flagsOfLanes, // i32, nFibre × lanes

  numbers,
  count,
}

export enum Numbers {
  profileError,
  kappaSquared,
  growKappaSquared,
  halfAperture,
  count,
}

export enum MethodCode {
  joint,
  optimal,
  boxcar,
}
