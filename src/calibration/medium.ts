/** What wavelengths hold in, and those of a whole product from air to vacuum, or back. */
import { CalibrationError } from "./errors.js";
import { airToVacuum, vacuumToAir } from "./refraction.js";
import type { PixelWavelengths } from "./spectraProduct.js";

/** Air: standard air, as line tables have it (refraction.ts). */
export type Medium = "air" | "vacuum";

/** The same wavelengths in `medium`; as they are when they hold there already.
 * @throws CalibrationError where the refraction of air is not known. */
export function inMedium(wavelengths: PixelWavelengths, medium: Medium): PixelWavelengths {
  if (medium === wavelengths.medium) return wavelengths;
  try {
    return { medium, image: wavelengths.image.map(medium === "vacuum" ? airToVacuum : vacuumToAir) };
  } catch (error) {
    if (error instanceof RangeError) throw new CalibrationError(error.message);
    throw error;
  }
}
