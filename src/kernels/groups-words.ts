/** Where assembly/groups.ts finds what it needs: one block of 32-bit words. AssemblyScript reads this same file, so that both
 * sides of the door count alike. Pointers are byte offsets into the memory; 0 means absent. */
export enum GroupWord {
  /** A multiple of four. */
  nRow,
  /** Pixels from one row to the next; four may be read beyond a group's last one. */
  stride,
  nGroup,
  electrons, // f32, nRow × stride; made NaN for a pixel without value
  nUsed, // u8, nRow × stride: frames in a pixel's mean; 0: without value
  isSingle, // not 0: no pixel is the mean of several frames
  fixedRow, // i32, nRow: which row of `fixedVariance`
  fixedVariance, // f32, rows of `stride`
  inverseResponse, // f32, nRow × stride, or absent
  responseRelativeVariance, // f32, nRow × stride, or absent
  from, // i32, nGroup: first column
  width, // i32, nGroup: columns
  network, // i32, nGroup: pointer to the group's comparators, pairs of byte offsets, i32
  nComparator, // i32, nGroup
  median, // f64, nGroup × nRow
  mean, // f64, nGroup × nRow
  nKept, // i32, nGroup × nRow
  meanFixed, // f64, nGroup × nRow
  meanPerElectron, // f64, nGroup × nRow
  scratch, // of one thread: 16 bytes for each column of the widest group, and three more
  count,
}
