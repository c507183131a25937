/** Emission lines of the night sky in air, Å, that are known to 0.02 Å: oxygen, sodium and hydroxyl, and the mercury of street
 * lamps.
 *
 * From memory: O I, Na I and Hg I after the NIST Atomic Spectra Database, OH after Osterbrock et al. 1996, PASP 108, 277 (the mean of
 * the two components of Λ doublets that no fibre spectrograph of R < 20000 separates). Strengths are rough, 5577 = 100: airglow
 * changes by factors of several within a night, hydroxyl and oxygen each in their own way. */

export interface SkyLine {
  /** Å in air. */
  wavelength: number;
  /** Relative, roughly; 0 where it depends on the place (street lamps). */
  strength: number;
  species: "O I" | "Na I" | "OH" | "Hg I";
  /** Å to the nearest other emission of the sky that is over a tenth as strong: a spectrum of a coarser resolution sees a blend. */
  alone: number;
  /** 1: first choice for a zero point; 2: good where it is resolved (`alone`); 0: no zero point from it, since a target's own or the
   * Sun's line, a street lamp or a blend sits there. */
  zeroPoint: 0 | 1 | 2;
}

const SKY: readonly [number, number, SkyLine["species"], number, SkyLine["zeroPoint"]][] = [
  [5460.75, 0, "Hg I", 20, 0],
  [5577.338, 100, "O I", 15, 1],
  [5769.61, 0, "Hg I", 20, 0],
  [5790.67, 0, "Hg I", 20, 0],
  [5889.951, 12, "Na I", 5.9, 0],
  [5895.924, 7, "Na I", 5.9, 0],
  [6300.304, 45, "O I", 6.5, 1],
  [6363.776, 15, "O I", 20, 1],
  [6498.729, 5, "OH", 3, 2],
  [6533.044, 6, "OH", 10, 2],
  [6553.617, 5, "OH", 8, 2],
  [6863.955, 10, "OH", 7, 2],
  [6923.22, 10, "OH", 10, 2],
  [7276.405, 20, "OH", 8, 2],
  [7316.282, 20, "OH", 10, 2],
  [7340.885, 20, "OH", 10, 2],
  [7750.64, 30, "OH", 9, 2],
  [7794.112, 30, "OH", 12, 2],
  [7821.503, 30, "OH", 12, 2],
  [7913.708, 40, "OH", 5, 2],
  [7964.65, 35, "OH", 13, 2],
  [7993.332, 35, "OH", 19, 2],
  [8344.602, 40, "OH", 8, 2],
  [8399.17, 50, "OH", 15, 2],
  [8430.174, 45, "OH", 13, 2],
];

/** In rising order. */
export const SKY_LINES: readonly SkyLine[] = SKY.map(([wavelength, strength, species, alone, zeroPoint]) => ({
  wavelength,
  strength,
  species,
  alone,
  zeroPoint,
}));

/** Lines fit for a zero point between two wavelengths (Å in air) at a resolution element of `fwhm` Å: alone over twice that width, first
 * choices first and strong before weak. Oxygen is enough where it is seen; hydroxyl serves in the red. */
export function zeroPointLines(range: readonly [number, number], fwhm: number): SkyLine[] {
  const [low, high] = range[0] < range[1] ? range : [range[1], range[0]];
  return SKY_LINES.filter(
    (line) => line.zeroPoint > 0 && line.wavelength > low && line.wavelength < high && line.alone > 2 * fwhm,
  ).sort((a, b) => a.zeroPoint - b.zeroPoint || b.strength - a.strength);
}
