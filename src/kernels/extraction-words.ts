/** Where the extraction kernel finds what it needs: one block of 32-bit words, then one of doubles. AssemblyScript reads
 * this same file, so that both sides of the door count alike.
 *
 *     jobPtr → | Word.nx | Word.ny | … | Word.count − 1 |          4 bytes each
 *     Word.numbers → | Numbers.profileError | … |                  8 bytes each
 *
 * Pointers are byte offsets into the memory; 0 means absent. T is the lanes' type, f32 or f64; a lane row is one v128
 * a detector row, `ny + 2·margin` of them, margin = 2·halfWindow + 1. */
export enum Word {
  nx,
  ny,
  nFibre,
  halfWindow,
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
  modelImage, // f32, ny × nx, or absent: light of all fibres, without background

  // scratch of one worker
  start, // i32, nFibre
  shapeTerms, // f64, 7
  nodeCentre, // T, nFibre × 4
  nodeWeights, // T, nFibre × 4 × nWindow
  nodeShares, // T, 4 × blockColumns
  rowPolynomials, // T, ny × nY
  backgroundSeries, // f64, nY × lanes
  bits, // u32, a byte a lane
  light, // lane rows from here on
  backgroundRows,
  fixed,
  inverseResponseRows,
  responseVarianceRows,
  inverseVariance,
  model,
  reach,
  excess,
  weights, // v128, nFibre × nWindow
  aperture, // v128, nFibre × nWindow
  weighted, // v128, nWindow
  centre, // v128, nFibre, and so on:
  fluxes,
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
