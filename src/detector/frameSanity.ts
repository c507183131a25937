/** What a frame's own picture says against its header. */
import type { Spectrograph } from "../spectrograph.js";
import type { Assembled } from "./assemble.js";
import { medianOf, thinned } from "./clip.js";
import { DetectorError } from "./detectorError.js";
import { headerDisagreements } from "./headerDisagreements.js";
import { saturatedShare } from "./levels.js";
import { percent } from "./rawSanity.js";
import { isRegular, ribbonAxis, ribbonsAlong } from "./ribbons.js";

/** @throws DetectorError when ribbons of light clearly run along the other axis than wavelength is said to. */
export function refuseOtherAxis(frame: Assembled, spectrograph?: Spectrograph): void {
  const { electrons, nx, ny } = frame;
  // Across the columns first: where there are no ribbons along them, as should be, the other axis need not be asked.
  if (!isRegular(ribbonsAlong("y", electrons, nx, ny)) || ribbonAxis(electrons, nx, ny) !== "y") return;
  const axis = frame.layout.dispersionAxis;
  const remedy = spectrograph?.detector.dispersionAxis
    ? `correct dispersion_axis in ${spectrograph.file}`
    : `give dispersion_axis = ${3 - axis} in the spectrograph file`;
  throw new DetectorError(
    `${frame.name}: wavelength is said to run along axis ${axis}, but the ribbons of light run along axis ${3 - axis}; ${remedy}.`,
  );
}

/** One sentence each: what was masked for want of a value, levels under the overscan, read noise off the header's. */
export function frameWarnings(frame: Assembled): string[] {
  const { name, missing, regions } = frame;
  const warnings: string[] = [];
  const { constantColumns, constantRows, nanPixels, zeroPixels } = missing;
  if (constantColumns)
    warnings.push(`${name}: ${constantColumns} columns hold one constant (dropped readout) and are masked.`);
  if (constantRows) warnings.push(`${name}: ${constantRows} rows hold one constant (dropped readout) and are masked.`);
  if (nanPixels) warnings.push(`${name}: ${nanPixels} pixels have no value (NaN or blank) and are masked.`);
  if (zeroPixels && !constantColumns && !constantRows) {
    warnings.push(
      `${name}: ${zeroPixels} pixels are 0 ADU, far under the overscan's level, and are masked as missing.`,
    );
  }
  const median = medianOf(thinned(frame.electrons));
  const saturated = saturatedShare(frame);
  const noise = Math.sqrt(Math.max(...regions.map((region) => region.readVariance)));
  if (median < -10 * noise) {
    warnings.push(
      `${name}: most pixels lie below the overscan (median ${median.toFixed(0)} e⁻); the overscan section seems to hold light or to be another one.`,
    );
  }
  if (saturated > 0.001) {
    warnings.push(`${name}: ${percent(saturated)} of its pixels are saturated.`);
  }
  for (const { overscan, amplifier } of regions) {
    if (overscan === undefined) continue;
    if (overscan.readNoiseAdu === 0) {
      warnings.push(`${name}: the overscan of amplifier ${amplifier.number} has no noise at all; it was not read out.`);
    }
    if (overscan.coveredShare < 1) {
      warnings.push(
        `${name}: amplifier ${amplifier.number}: only ${percent(overscan.coveredShare)} of its lines have overscan values; the level in between is interpolated, beyond the ends held constant.`,
      );
    }
    if (overscan.jitterVariance > 0) {
      const jitter = amplifier.gain * Math.sqrt(overscan.jitterVariance);
      warnings.push(
        `${name}: amplifier ${amplifier.number}: whole lines jump by ${jitter.toFixed(2)} e⁻ beyond read noise; it is added to the variance.`,
      );
    }
  }
  return [...warnings, ...headerDisagreements(name, regions)];
}
