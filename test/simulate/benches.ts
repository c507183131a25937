/** Small scenes for the tests, one trouble at a time. */
import { parseScene, type Scene } from "../../src/simulate/scene.js";

/** The text of a small scene; each part can be replaced or added to. */
export function sceneText(parts: {
  seed?: number;
  detector?: string;
  slit?: string;
  rest?: string;
  exposures?: string;
}): string {
  return `name = "test bench"
seed = ${parts.seed ?? 3}
[detector]
${parts.detector ?? "size = [150, 121]\n[[detector.amplifier]]\ngain = 1.3\nread_noise = 4\noverscan = 20"}
[slit]
${parts.slit ?? "blocks = [7, 9]\npitch = 5.3\ngap = 8"}
${parts.rest ?? "[profile]\nfwhm = 2.5\n[wavelength]\nrange = [5500, 6500]"}
${parts.exposures ?? '[[exposure]]\nname = "sci_01"\nkind = "science"\nseconds = 900'}
`;
}

export function smallScene(parts: Parameters<typeof sceneText>[0] = {}): Scene {
  return parseScene(sceneText(parts), "test.toml");
}

/** Every ingredient at once, four amplifiers, dispersion along FITS axis 2. */
export const EVERYTHING = {
  detector: `size = [121, 150]
dispersion_axis = 2
dark = 0.02
response_rms = 0.01
bias_pattern = 2
bad_columns = [31]
[[detector.amplifier]]
gain = 1.1
read_noise = 3
bias = 900
drift = 4
overscan = 12
place = "[1:61,1:75]"
[[detector.amplifier]]
gain = 1.4
read_noise = 5
bias = 1100
drift = 3
overscan = 16
place = "[62:121,1:75]"
[[detector.amplifier]]
gain = 0.9
read_noise = 2
bias = 1300
drift = 5
overscan = 8
place = "[1:61,76:150]"
[[detector.amplifier]]
gain = 1.7
read_noise = 4
bias = 700
drift = 2
overscan = 20
place = "[62:121,76:150]"`,
  rest: `[tramlines]
tilt = 1.5
bow = 3
own_place = 0.1
[profile]
fwhm = 2.4
second_share = 0.15
second_offset = 0.3
wing_share = 0.02
own_width = 0.03
reach = 50
[wavelength]
range = [7200, 6200]
[light]
scattered_share = 0.05
throughput_rms = 0.1
[cosmic_rays]
rate = 40`,
  exposures: `[[exposure]]
name = "bias_01"
kind = "bias"
[[exposure]]
name = "fflat_01"
kind = "fibre-flat"
seconds = 3
[[exposure]]
name = "sci_01"
kind = "science"
seconds = 900
shift = 0.4
stretch = 0.001`,
};

export function sum(values: ArrayLike<number>): number {
  let total = 0;
  for (let i = 0; i < values.length; i++) total += values[i];
  return total;
}

/** (χ² − n) / √(2n): for n of a few hundred and more χ² is normal to good accuracy (Abramowitz & Stegun 26.4.13, leading
 * term), so that beyond ± 4.4 it falls in 1 of 1e5 cases. */
export function chiSquareScore(chiSquare: number, n: number): number {
  return (chiSquare - n) / Math.sqrt(2 * n);
}
