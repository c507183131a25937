/** A calibration that cannot be trusted: one sentence with what was found, what was expected and the remedy. Thrown rather than
 * guessed: a wavelength scale read one line off looks as good as the right one. */
export class CalibrationError extends Error {
  override readonly name: string = "CalibrationError";
}
