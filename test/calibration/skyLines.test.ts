/** Osterbrock et al. 1996, PASP 108, 277, and the NIST Atomic Spectra Database, from memory, as in the design. */
import { describe, expect, it } from "vitest";
import { SKY_LINES, zeroPointLines } from "../../src/calibration/skyLines.js";
import { NIGHT_SKY_LINES } from "../../src/simulate/lines.js";

describe("lines of the night sky", () => {
  it("rise, and hold the oxygen of the design", () => {
    const wavelengths = SKY_LINES.map((line) => line.wavelength);
    expect(wavelengths).toEqual([...wavelengths].sort((a, b) => a - b));
    for (const line of [5577.338, 6300.304, 6363.776]) expect(wavelengths).toContain(line);
  });

  it("agree with the simulator's, typed on another day", () => {
    for (const [wavelength] of NIGHT_SKY_LINES) {
      expect(Math.min(...SKY_LINES.map((line) => Math.abs(line.wavelength - wavelength)))).toBeLessThan(0.02);
    }
  });

  it("are alone as far as the list itself can tell", () => {
    for (const line of SKY_LINES) {
      for (const other of SKY_LINES) {
        if (other === line || other.strength < 0.1 * line.strength) continue;
        expect(Math.abs(other.wavelength - line.wavelength)).toBeGreaterThan(line.alone - 0.1);
      }
    }
  });

  it("for a zero point: oxygen first, never sodium or street lamps, no blends", () => {
    const red = zeroPointLines([7400, 5500], 3);
    expect(red.slice(0, 3).map((line) => line.wavelength)).toEqual([5577.338, 6300.304, 6363.776]);
    expect(red.every((line) => line.species === "O I" || line.species === "OH")).toBe(true);
    expect(red.some((line) => line.wavelength === 6498.729)).toBe(false);
    expect(zeroPointLines([6200, 6400], 4).map((line) => line.wavelength)).toEqual([6363.776]);
  });
});
