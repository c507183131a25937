/** Spectra of evenly lit frames to throughput.fits. */
import { readProduct } from "../calibration/spectraProduct.js";
import { measureThroughput } from "../calibration/throughput.js";
import { fibreLevels, writeThroughput } from "../calibration/throughputFile.js";
import { combineThroughputs } from "../calibration/throughputSet.js";
import { readWavelengths } from "../calibration/wavelengthFile.js";
import { wavelengthImage } from "../calibration/wavelengths.js";
import { openProduct } from "./correction.js";
import { finite } from "./finite.js";
import type { Facts, Job } from "./task.js";

export async function makeThroughput(job: Job): Promise<Facts> {
  const { version, from } = job.options as { version: string; from: string };
  const solution = await openProduct(job, "wavelengths.fits", readWavelengths);
  const lit = Object.entries(job.from).filter(([name]) => name.startsWith("extracted/"));
  const products = await Promise.all(lit.map(([, { path }]) => readProduct(path)));
  const wavelengths = wavelengthImage(solution);
  const throughput = combineThroughputs(
    products.map(({ spectra, name }) => measureThroughput(spectra, wavelengths, solution.geometryDigest, name)),
  );
  const digest = job.from["wavelengths.fits"].digest.slice(0, 16);
  await writeThroughput(job.products[0], throughput, {
    ...{ version, options: [`from ${from}`], header: products[0].primaryHeader },
    inputs: [
      ...products.map((one) => ({ name: one.name, checksum: one.checksum })),
      { name: "wavelengths.fits", checksum: digest },
    ],
  });
  const levels = Array.from(fibreLevels(throughput)).filter(Number.isFinite);
  return {
    frames: products.map((one) => one.name),
    lowest: finite(Math.min(...levels)),
    highest: finite(Math.max(...levels)),
  };
}
