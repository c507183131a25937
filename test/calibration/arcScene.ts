/** Arcs simulated, corrected and extracted with their true tramlines. */
import type { ArcExposure } from "../../src/calibration/arc.js";
import { extractFrame } from "../../src/extraction/extract.js";
import { type SimulatedExposure, simulateExposure, type Truth } from "../../src/simulate/exposure.js";
import { parseScene, type Scene } from "../../src/simulate/scene.js";
import type { Tramlines } from "../../src/tramlines/tramlines.js";
import { frameFromTruth, tramlinesFromTruth } from "../extraction/fromTruth.js";

export const ARC_SCENE = `name = "arc bench"
seed = 21
clean = true
[detector]
size = [820, 150]
[[detector.amplifier]]
gain = 1.1
read_noise = 3
[slit]
blocks = [9, 13]
pitch = 5.2
gap = 9
dead = [6]
sky = [3, 12]
[tramlines]
tilt = 1.1
bow = 1.5
own_place = 0.05
[profile]
fwhm = 2.5
[wavelength]
range = [5800, 7400]
curve = 11
cubic = -2
slit_bow = 6
own_place = 0.06
fwhm = 2.3
lamps = ["Ne", "Ar"]
[light]
flat_rate = 3000
arc_rate = 8000
throughput_rms = 0.05
[science]
faintest = 20
brightest = 5e3
seconds = 900
sky_level = 20
sky_line = 20000
[[exposure]]
name = "arc_01"
kind = "arc"
seconds = 20
[[exposure]]
name = "arc_02"
kind = "arc"
seconds = 20
dispersion_shift = -0.04
[[exposure]]
name = "sci_01"
kind = "science"
seconds = 900
dispersion_shift = 0.11
`;

export const arcScene: Scene = parseScene(ARC_SCENE, "arc bench");

export interface ExtractedArcs {
  exposures: ArcExposure[];
  tramlines: Tramlines;
  /** Of the first exposure. */
  truth: Truth;
}

export async function extractArcs(...names: string[]): Promise<ExtractedArcs> {
  const simulated: SimulatedExposure[] = names.map((name) => simulateExposure(arcScene, name));
  const tramlines = tramlinesFromTruth(simulated[0]);
  const exposures: ArcExposure[] = [];
  for (const one of simulated) {
    const { spectra } = await extractFrame(frameFromTruth(one, 3), tramlines);
    exposures.push({ name: one.name, spectra });
  }
  return { exposures, tramlines, truth: simulated[0].truth };
}
