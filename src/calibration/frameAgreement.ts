/** Whether frames may be combined at all, and what looks wrong with them: another fibre set-up, another field, cloud. */
import { median } from "../reference/median.js";
import type { AlignedFrame } from "./alignFrames.js";
import type { FrameShare } from "./combineSpectra.js";
import { CalibrationError } from "./errors.js";
import type { FrameScale } from "./exposureScale.js";
import type { SpectraProduct } from "./spectraProduct.js";

/** Robust scatter of fibres' light against the other frames: beyond the first another field, beyond the second worth a word. */
const otherField = 0.5;
const uneven = 0.15;
/** A share of its points rejected beyond which cosmic rays alone are no likely reason. */
const manyRejected = 0.03;
/** Light per second, against the median frame's. */
const cloudy = 0.5;

/** @throws CalibrationError naming the first frame that was not made like the first. */
export function requireAlike(products: SpectraProduct[]): void {
  if (products.length < 2) throw new CalibrationError("One file of spectra was given; give two or more to combine.");
  const [first] = products;
  const geometry = (product: SpectraProduct) => product.primaryHeader.get("TRAMGEOM");
  for (const product of products) {
    const { name, spectra } = product;
    const refuse = (finding: string, remedy: string) => new CalibrationError(`${name}: ${finding}; ${remedy}.`);
    if (product.rebinned) {
      throw refuse("these spectra were rebinned", "combine the spectra that they were made from, and rebin the result");
    }
    if (product === first) continue;
    const twin = products.slice(0, products.indexOf(product)).find((other) => other.checksum === product.checksum);
    if (twin !== undefined) {
      throw refuse(`it holds the same spectra as ${twin.name}`, "give each exposure once, or it would count twice");
    }
    if (spectra.nFibre !== first.spectra.nFibre || spectra.nx !== first.spectra.nx) {
      const [here, there] = [spectra, first.spectra].map((one) => `${one.nFibre} × ${one.nx}`);
      throw refuse(
        `${here} points, but ${first.name} has ${there}`,
        "combine spectra of the same fibres and readout window",
      );
    }
    if (geometry(product) !== geometry(first)) {
      throw refuse(`another readout window than that of ${first.name}`, "combine spectra of the same readout window");
    }
    if (spectra.method !== first.spectra.method || spectra.crosstalkCorrected !== first.spectra.crosstalkCorrected) {
      const said = ({ spectra: { method, crosstalkCorrected } }: SpectraProduct) =>
        `${method}${method === "joint" ? "" : crosstalkCorrected ? ", cross-talk corrected" : ", cross-talk left in"}`;
      throw refuse(`extracted as ${said(product)}, but ${first.name} as ${said(first)}`, "extract all frames alike");
    }
    for (const part of ["wavelengths", "sky"] as const) {
      if ((product[part] === undefined) === (first[part] === undefined)) continue;
      const has = (one: SpectraProduct) => (one[part] === undefined ? "no" : "its");
      const what = part === "sky" ? "sky subtraction (HDU SKY)" : "wavelengths (HDU WAVELENGTH)";
      throw refuse(`${has(product)} ${what}, but ${first.name} has ${has(first)}`, "calibrate all frames alike");
    }
    if (product.wavelengths?.medium !== first.wavelengths?.medium) {
      throw refuse(
        `wavelengths in ${product.wavelengths!.medium}, but not so in ${first.name}`,
        "calibrate all frames alike",
      );
    }
  }
}

/** @throws CalibrationError naming frames whose fibres' light does not go with the others', or a first frame without light. */
export function requireOneField(frames: AlignedFrame[], scales: FrameScale[]): void {
  const wrong = frames.filter((_, i) => scales[i].scatter > otherField);
  const highest = scales.reduce((most, { scale }) => Math.max(most, scale), 0);
  if (highest > 50) {
    const { name } = frames[0];
    throw new CalibrationError(
      `${name}: it has ${(100 / highest).toPrecision(2)} % of the light of the brightest frame, and all are scaled to it; leave it out, or name another first.`,
    );
  }
  if (wrong.length === 0) return;
  const names = wrong.map(({ name }) => name).join(", ");
  const scatter = Math.round(100 * Math.max(...scales.map((one) => (one.scatter > otherField ? one.scatter : 0))));
  throw new CalibrationError(
    `${names}: the fibres' light scatters by ${scatter} % against ${frames.length === 2 ? frames[0].name : "the other frames"}, so that this looks like another field; leave out what does not belong, or combine all the same with --trust-field.`,
  );
}

/** Sentences about frames that look wrong. */
export function stackWarnings(products: SpectraProduct[], shares: FrameShare[], tolerance: number): string[] {
  const rate = shares.map(({ scale, exposureSeconds }) => scale / exposureSeconds);
  const usual = median(rate.filter((one) => Number.isFinite(one)));
  const percent = (share: number) => `${(100 * share).toPrecision(2)} %`;
  return [
    ...objects(products),
    ...shares.flatMap((share, i) => frameWarnings(share, rate[i] / usual, tolerance, percent)),
  ];
}

function frameWarnings(
  share: FrameShare,
  transparency: number,
  tolerance: number,
  percent: (share: number) => string,
): string[] {
  const { name, scatter, rejectedShare, from, lineShift, lineShiftError, apart } = share;
  const said: string[] = [];
  if (from !== "light") {
    const taken = from === "exposure time" ? "the exposure times were taken" : "it counts like the first";
    said.push(`${name}: too little light to scale it by; ${taken}.`);
  }
  if (from === "light" && transparency < cloudy) {
    said.push(`${name}: ${percent(transparency)} of the usual light per second; cloud, or a telescope off its field?`);
  }
  if (scatter > uneven) {
    said.push(
      `${name}: its fibres' light scatters by ${percent(scatter)} against the other frames; guiding, seeing, or another field?`,
    );
  }
  if (rejectedShare > manyRejected) {
    said.push(
      `${name}: ${percent(rejectedShare)} of its points were rejected, more than cosmic rays explain; look at it.`,
    );
  }
  if (Math.abs(lineShift) > tolerance && Math.abs(lineShift) > 5 * lineShiftError) {
    const shift = `${lineShift.toFixed(3)} ± ${lineShiftError.toFixed(3)} px`;
    const remedy = Number.isNaN(apart)
      ? "calibrate the frames with --wavelengths, so that their light can be moved"
      : "its zero point is not what its wavelengths say";
    said.push(`${name}: its lines lie ${shift} from the first frame's, which broadens the sum; ${remedy}.`);
  }
  return said;
}

function objects(products: SpectraProduct[]): string[] {
  const names = products.map(({ primaryHeader }) => String(primaryHeader.get("OBJECT") ?? "").trim());
  const i = names.findIndex((name) => name !== names[0]);
  if (i < 0) return [];
  return [
    `${products[i].name}: OBJECT is '${names[i]}', but '${names[0]}' in ${products[0].name}; are they of one field?`,
  ];
}
