/** What is wrong with a frame or a calibration, said in one sentence: what was found, what was expected, what helps. */
export class DetectorError extends Error {
  override name = "DetectorError";
}
