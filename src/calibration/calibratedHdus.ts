/** What a calibrated product holds beyond the spectra: WAVELENGTH, SKY and SKY_VAR, and cards that say what was done. */
import type { OutputHdu } from "../fits/encode.js";
import type { Card } from "../fits/header.js";
import type { Calibrated } from "./calibrate.js";

/** For the primary header. */
export function calibrationCards({ throughput, sky, scaled }: Calibrated): Card[] {
  return [
    { keyword: "THRUDIV", value: throughput !== null, comment: "divided by relative throughput" },
    {
      keyword: "SKYSUB",
      value: sky === null ? "off" : scaled === null ? "on" : "scaled",
      comment: "sky taken off: on, off or scaled",
    },
    ...(sky === null
      ? []
      : [
          {
            keyword: "NSKY",
            value: sky.checks.length - sky.leftOut.length,
            comment: "sky fibres that the sky was made from",
          },
          { keyword: "NSKYOUT", value: sky.leftOut.length, comment: "sky fibres left out" },
        ]),
  ];
}

export function calibratedHdus(calibrated: Calibrated): OutputHdu[] {
  const { wavelengths, spectra, sky } = calibrated;
  const size = { nx: spectra.nx, ny: spectra.nFibre };
  const hdus: OutputHdu[] = [
    {
      kind: "image",
      name: "WAVELENGTH",
      ...size,
      data: wavelengths,
      unit: "Angstrom",
      cards: wavelengthCards(calibrated),
    },
  ];
  if (sky === null) return hdus;
  const comment = (text: string): Card[] => [{ keyword: "COMMENT", comment: text }];
  return [
    ...hdus,
    {
      ...{ kind: "image", name: "SKY", ...size, data: Float32Array.from(sky.values), unit: "electron" },
      cards: comment("Sky that was taken off FLUX, in light of a fibre of throughput 1; NaN where no sky fibre tells."),
    },
    {
      ...{ kind: "image", name: "SKY_VAR", ...size, data: Float32Array.from(sky.variance), unit: "electron2" },
      cards: comment(
        "Variance of SKY; part of FLUX_VAR already, and common to all fibres at one wavelength, so that it does not average out over fibres. " +
          "Sky fibres' own samples are part of SKY: their FLUX_VAR is smaller by it, not larger.",
      ),
    },
  ];
}

function wavelengthCards({ medium, zeroPoint }: Calibrated): Card[] {
  return [
    { keyword: "MEDIUM", value: medium, comment: "air or vacuum" },
    { keyword: "SPECSYS", value: "TOPOCENT", comment: "the observer's rest frame" },
    ...(zeroPoint === null
      ? []
      : [
          { keyword: "ZEROPT", value: zeroPoint.pixels, comment: "[pixel] of the frame's light against the arc's" },
          { keyword: "ZEROPTER", value: zeroPoint.error, comment: "[pixel] its standard error" },
          { keyword: "NZEROPT", value: zeroPoint.nLine, comment: "sky lines that it was measured on" },
        ]),
    {
      keyword: "COMMENT",
      comment: `Wavelength of each pixel's middle as the observer saw it; no barycentric correction is applied.${zeroPoint === null ? " No zero point was measured: the arc's wavelengths as they are." : ""}`,
    },
  ];
}
