/** The cards that an observer finds in a raw frame. */
import type { Card, CardValue } from "../fits/header.js";
import { type ReadoutLayout, sectionOf } from "./readoutLayout.js";
import type { ExposureKind, Scene, SceneExposure } from "./scene.js";

const IMAGE_TYPES: Record<ExposureKind, string> = {
  bias: "bias",
  dark: "dark",
  "detector-flat": "detflat",
  "fibre-flat": "fibreflat",
  arc: "arc",
  twilight: "twilight",
  science: "object",
};

/** The invented night's first exposure starts here, UTC. */
const NIGHT_START = Date.UTC(2033, 9, 21, 18, 40, 0);
const READOUT_SECONDS = 45;

export function exposureCards(scene: Scene, exposure: SceneExposure, layout: ReadoutLayout): Card[] {
  const { detector } = scene;
  const [n1, n2] = detector.size;
  return [
    card("OBJECT", exposure.object ?? exposure.kind, "what was observed"),
    card("IMAGETYP", IMAGE_TYPES[exposure.kind], "kind of exposure"),
    card("EXPTIME", exposure.seconds, "[s] shutter open"),
    card("DARKTIME", exposure.seconds, "[s] dark current gathered"),
    card("DATE-OBS", startOf(scene, exposure), "start of exposure, UTC"),
    card("INSTRUME", scene.name, "simulated"),
    card("FRAMEID", exposure.name, "name of the frame"),
    card("NAMPS", layout.amplifiers.length, "number of amplifiers"),
    card("SATURATE", detector.saturation, "[adu] saturation level"),
    card("DISPAXIS", detector.dispersion_axis, "FITS axis along which wavelength runs"),
    card("CCDSIZE", `[1:${n1},1:${n2}]`, "assembled frame"),
    ...layout.amplifiers.flatMap(({ data, overscan, place }, i) => [
      card(`GAIN${i + 1}`, detector.amplifier[i].gain, "[electron/adu]"),
      card(`RDNOISE${i + 1}`, detector.amplifier[i].read_noise, "[electron]"),
      card(`DATASEC${i + 1}`, sectionOf(data), "its pixels in this file"),
      ...(overscan.x1 > overscan.x0 ? [card(`BIASSEC${i + 1}`, sectionOf(overscan), "its overscan in this file")] : []),
      card(`CCDSEC${i + 1}`, sectionOf(place), "where its pixels go when assembled"),
    ]),
  ];
}

function card(keyword: string, value: CardValue, comment: string): Card {
  return { keyword, value, comment };
}

/** Exposures follow one another in the scene's order; one that is not of the scene starts the night. */
function startOf(scene: Scene, exposure: SceneExposure): string {
  let at = NIGHT_START;
  for (const earlier of scene.exposure) {
    if (earlier.name === exposure.name) return new Date(at).toISOString().slice(0, 19);
    at += Math.round(1000 * (earlier.seconds + READOUT_SECONDS));
  }
  return new Date(NIGHT_START).toISOString().slice(0, 19);
}
