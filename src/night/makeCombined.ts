/** Spectra of one field's frames to one set of spectra. */
import { basename } from "node:path";
import { combinedHdus } from "../calibration/combineFile.js";
import { combineSpectra } from "../calibration/combineSpectra.js";
import { readProduct } from "../calibration/spectraProduct.js";
import { medianSignalToNoise } from "../extraction/snr.js";
import { writeFits } from "../fits/write.js";
import { median } from "../reference/median.js";
import { finite } from "./finite.js";
import type { Facts, Job } from "./task.js";

interface Options {
  version: string;
  cosmicRays: boolean;
  /** File names of all frames of the field; some may have failed. */
  products: string[];
}

export async function makeCombined(job: Job): Promise<Facts> {
  const { version, cosmicRays, products: wanted } = job.options as unknown as Options;
  const products = await Promise.all(Object.values(job.from).map(({ path }) => readProduct(path)));
  const combined = combineSpectra(products, { cosmicRays });
  await writeFits(
    job.products[0],
    combinedHdus(products, combined, {
      version,
      options: [`cosmic-rays ${cosmicRays ? "on" : "off"}`],
      inputs: products.map(({ name, checksum }) => ({ name, checksum })),
    }),
  );
  const snr = Array.from(medianSignalToNoise(combined.spectra)).filter(Number.isFinite);
  return {
    medianSignalToNoise: finite(median(snr)),
    frames: combined.frames.map(({ name, scale, error, weight }) => ({
      ...{ name, scale: finite(scale), error: finite(error), weight: finite(weight) },
    })),
    warnings: [...combined.warnings, ...missing(job, wanted)],
  };
}

function missing({ products: [path], from }: Job, wanted: string[]): string[] {
  const names = wanted.filter((name) => from[name] === undefined);
  if (names.length === 0) return [];
  return [`${basename(path)}: made without ${names.join(", ")}, which could not be made.`];
}
