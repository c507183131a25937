/** Where the kernels of assembly/shapeColumn.ts and assembly/shapeNormal.ts find what they need: one block of 32-bit words,
 * then one of doubles. AssemblyScript reads this same file, so that both sides of the door count alike.
 *
 *     jobPtr → | ShapeWord.nColumn | ShapeWord.ny | … |         4 bytes each
 *     ShapeWord.numbers → | ShapeNumbers.tableStart | … |       8 bytes each
 *
 * Pointers are byte offsets into the memory; 0 means absent. All arrays are f64 unless told otherwise. A lane is one of the
 * two columns that a tile holds. */
export enum ShapeWord {
  nColumn,
  ny,
  nFibre,
  /** Rows of a window, and those at each of its ends that local unknowns do not reach. */
  nWindow,
  margin,
  /** How many fibres further a local window still meets another one's, at the most. */
  neighbours,
  /** Local unknowns of a fibre: flux, shift, width. */
  nPar,
  nTable,
  nSpline,
  nBackground,

  // the columns
  light, // nColumn × ny, 0 where the pixel is not good
  fixedVariance, // nColumn × ny, infinite where the pixel is not good
  variancePerElectron, // nColumn × ny
  argument, // nColumn: x ∈ [−1, 1]
  centre, // nColumn × nFibre
  width, // nColumn × nFibre
  backgroundSeries, // nColumn × nBackground: its Legendre series in y
  rowPolynomials, // ny × nBackground: P_j(y)

  // the shape, and the functions that it is made of
  table, // nTable × 14
  centroid, // 7
  basis, // nTable × 2·nSpline, and four numbers more
  whole, // nSpline
  begun, // i32, 2 · (nTable − 1)

  // the answers
  flux, // nColumn × nFibre
  model, // nColumn × ny
  inverseVariance, // nColumn × ny
  solution, // nColumn × nFibre·nPar
  solutionVariance, // nColumn × nFibre·nPar
  chi2, // nColumn × 2: χ², good pixels
  normal, // nColumn × nPair × 16, blocks as assembly/rankUpdate.ts lays them out; absent unless asked for

  // scratch of one worker: for each lane
  columnTable, // nTable × 8
  first, // i32, nFibre
  fibre, // nFibre × 6
  weights, // nFibre × nWindow
  byCentre, // nFibre × nWindow
  byWidth, // nFibre × nWindow
  local, // nFibre × nPar × nWindow
  level, // ny
  rootWeight, // ny
  scaled, // ny
  // for both
  band, // v128, nFibre·nPar × (nPar·(neighbours + 1))
  inverse, // the same
  rhs, // v128, nFibre·nPar
  // for one
  edges, // 2 × (nSpline + 2)
  filled, // u32, nBlock
  design, // ny × 4·nBlock
  cross, // nFibre·nPar × 4·nBlock

  numbers,
  count,
}

export enum ShapeNumbers {
  tableStart,
  tableStep,
  referenceWidth,
  /** Share of its light that a pixel's model is wrong by. */
  modelError,
  /** 0: nothing is clipped. */
  clip,
  count,
}
