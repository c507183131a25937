/** A bench of two blocks of Gaussian fibres for what goes beyond the spectra; lengths, light and levels all uneven. Invented. */
import { type SimulatedExposure, simulateExposure } from "../../src/simulate/exposure.js";
import { parseScene } from "../../src/simulate/scene.js";

export const readNoise = 2.7;
export const nFibre = 13;

export interface BenchChange {
  seed?: number;
  /** Noise and cosmic rays go by it, spectra do not. */
  name?: string;
  pitch?: number;
  fwhm?: number;
  nx?: number;
  dead?: number[];
  /** Of the whole scene: [cosmic_rays] and the like. */
  more?: string;
  /** Keys of the exposure. */
  exposure?: string;
  science?: string;
}

/** One exposure; `straight` fibres run along whole rows. */
export function bench(kind: "science" | "fibre-flat", change: BenchChange = {}, straight = false): SimulatedExposure {
  const { seed = 5, name = "one", pitch = 5, fwhm = 2.5, nx = 320, dead = [4], more = "", exposure = "" } = change;
  const lines = straight ? "" : "tilt = 0.8\nbow = 0.9\nown_place = 0.05";
  const text = `name = "two blocks"
seed = ${seed}
[detector]
size = [${nx}, ${Math.round(13 * pitch + 75)}]
[[detector.amplifier]]
gain = 1
read_noise = ${readNoise}
[slit]
blocks = [6, 7]
pitch = ${pitch}
gap = 17
first = 25
dead = [${dead.join(", ")}]
[tramlines]
${lines}
[profile]
fwhm = ${fwhm}
[wavelength]
range = [5500, 6500]
[light]
flat_rate = 4000
throughput_rms = 0.1
throughput_slope = 0.1
[science]
${change.science ?? "faintest = 40\nbrightest = 2e4\nsky_level = 30\nsky_line = 4000"}
${more}
[[exposure]]
name = "${name}"
kind = "${kind}"
seconds = ${kind === "science" ? 900 : 5}
${exposure}
`;
  return simulateExposure(parseScene(text, "two blocks"), name);
}
