/** What a scene's single values cannot show: whether they agree with each other. */
import { layOutReadout } from "./readoutLayout.js";
import type { Scene } from "./scene.js";
import { columnArgument, series } from "./series.js";

/** The first disagreement, as the rest of a sentence after the file's name; undefined when there is none. */
export function checkScene(scene: Scene): string | undefined {
  return (
    checkSlit(scene) ?? checkDetector(scene) ?? checkWavelength(scene) ?? checkProfile(scene) ?? checkExposures(scene)
  );
}

function checkSlit({ slit, detector }: Scene): string | undefined {
  const nFibre = slit.blocks.reduce((sum, n) => sum + n, 0);
  if (nFibre > 5000) return `slit.blocks: ${nFibre} fibres, but at most 5000 can be simulated; take some out`;
  const nx = detector.size[detector.dispersion_axis - 1];
  if (nFibre * nx > 2e7) {
    return `slit.blocks: ${nFibre} fibres on ${nx} columns, but at most 2e7 points of spectra can be simulated; take some out`;
  }
  for (const key of ["dead", "sky"] as const) {
    const outside = slit[key].find((fibre) => fibre > nFibre);
    if (outside !== undefined)
      return `slit.${key}: found fibre ${outside}, but slit.blocks has ${nFibre} positions; correct one of them`;
  }
  if (Array.isArray(slit.gap) && slit.gap.length !== slit.blocks.length - 1) {
    return `slit.gap: found ${slit.gap.length} gaps, but ${slit.blocks.length} blocks have ${slit.blocks.length - 1} between them; give one number or one a gap`;
  }
  return undefined;
}

function checkDetector({ detector }: Scene): string | undefined {
  const outside = detector.bad_columns.find((column) => column > detector.size[0]);
  if (outside !== undefined)
    return `detector.bad_columns: found ${outside}, but the frame has ${detector.size[0]} columns; correct it`;
  const [n1, n2] = detector.size;
  if (n1 * n2 > 1e8) return `detector.size: ${n1} × ${n2} pixels, but at most 1e8 can be simulated; make it smaller`;
  const layout = layOutReadout(detector);
  return typeof layout === "string" ? `detector.amplifier: ${layout}` : undefined;
}

function checkWavelength({ wavelength, detector }: Scene): string | undefined {
  const [first, last] = wavelength.range;
  if (first === last)
    return `wavelength.range: both ends are ${first} Å; give the wavelengths at the first and the last column`;
  const coef = [(first + last) / 2, (last - first) / 2, wavelength.curve, wavelength.cubic];
  const nx = detector.size[detector.dispersion_axis - 1];
  for (let x = 1; x < nx; x++) {
    const step = series(coef, 0, 4, columnArgument(x, nx)) - series(coef, 0, 4, columnArgument(x - 1, nx));
    if (step * (last - first) <= 0) {
      return `wavelength.curve: the wavelength turns round at column ${x + 1}; make curve and cubic smaller against the range`;
    }
  }
  return undefined;
}

function checkProfile({ profile }: Scene): string | undefined {
  const second = profile.second_share * (1 + Math.abs(profile.second_tilt) + Math.abs(profile.second_across));
  if (second + profile.wing_share > 0.95) {
    return `profile: second_share and wing_share leave ${(1 - second - profile.wing_share).toFixed(2)} for the core; together they may take 0.95`;
  }
  const change = [profile.tilt, profile.bow, profile.across, profile.across_bow].reduce(
    (sum, v) => sum + Math.abs(v),
    0,
  );
  if (change > 0.8)
    return `profile: tilt, bow, across and across_bow add up to ${change.toFixed(2)}; the width stays positive up to 0.8`;
  return undefined;
}

function checkExposures({ exposure, science }: Scene): string | undefined {
  const seen = new Set<string>();
  for (const [i, { name, kind, seconds }] of exposure.entries()) {
    if (seen.has(name))
      return `exposure[${i + 1}].name: ${name} is taken already; give each exposure a name of its own`;
    seen.add(name);
    if (kind !== "bias" && seconds <= 0)
      return `exposure[${i + 1}].seconds: found ${seconds} for a ${kind}; only a bias takes no time`;
  }
  if (science.brightest < science.faintest) {
    return `science.brightest: found ${science.brightest}, below science.faintest = ${science.faintest}; swap them`;
  }
  return undefined;
}
