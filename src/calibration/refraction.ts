/** Wavelengths in air and in vacuum, by the dispersion of standard air of Ciddor 1996, Appl. Opt. 35, 1566, eq. 1: dry, 15 °C,
 * 101325 Pa, 450 ppm of CO2,
 *
 *     10⁸ (n − 1) = 5792105 / (238.0185 − σ²) + 167917 / (57.362 − σ²),   σ = 1/λ_vacuum in µm⁻¹
 *
 * as line tables use it; the air in the dome is none of its business, since a spectrum is calibrated by lines that go through the same
 * air. The equation was fitted to measurements between 2300 and 16900 Å. Below 2000 Å air absorbs, tables list vacuum
 * wavelengths only, and the equation runs into its pole at 1320 Å: refused. */

/** Å: where the equation rests on measurements, and between which it is evaluated at all. */
export const MEASURED_RANGE = [2300, 16900] as const;
const FROM = 2000;
const TO = 25000;
/** An iteration shrinks the error by λ·dn/dλ, at most 1e-4 from 2000 Å on. */
const ITERATIONS = 5;

/** λ in vacuum of a wavelength in standard air, Å. Error of the inversion below 1e-11 Å; beyond 16900 Å the equation is an
 * extrapolation, good to about 0.001 Å.
 * @throws RangeError below 2000 Å, beyond 25000 Å. NaN stays NaN. */
export function airToVacuum(air: number): number {
  requireRange(air, "air");
  let vacuum = air;
  for (let i = 0; i < ITERATIONS; i++) vacuum = air * refractiveIndex(vacuum);
  return vacuum;
}

/** λ in standard air of a wavelength in vacuum, Å.
 * @throws RangeError below 2000 Å, beyond 25000 Å. NaN stays NaN. */
export function vacuumToAir(vacuum: number): number {
  requireRange(vacuum, "vacuum");
  return vacuum / refractiveIndex(vacuum);
}

/** n of standard air at a vacuum wavelength in Å. */
export function refractiveIndex(vacuum: number): number {
  const s = 1e4 / vacuum;
  return 1 + 1e-8 * (5792105 / (238.0185 - s * s) + 167917 / (57.362 - s * s));
}

function requireRange(wavelength: number, medium: string): void {
  if (Number.isNaN(wavelength) || (wavelength >= FROM && wavelength <= TO)) return;
  throw new RangeError(
    `${wavelength} Å in ${medium} cannot be turned into the other medium: the refraction of air is known from ${FROM} to ${TO} Å; below, tables give vacuum wavelengths only.`,
  );
}
