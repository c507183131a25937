/** Extracted spectra to calibrated ones: wavelengths, throughput, sky. */
import { calibrateSpectra } from "../calibration/calibrate.js";
import { calibratedProductHdus } from "../calibration/calibratedFile.js";
import { readProduct } from "../calibration/spectraProduct.js";
import { readThroughput } from "../calibration/throughputFile.js";
import { readWavelengths } from "../calibration/wavelengthFile.js";
import { type FrameZeroPoint, measureZeroPoint } from "../calibration/zeroPoint.js";
import { medianSignalToNoise } from "../extraction/snr.js";
import { writeFits } from "../fits/write.js";
import { median } from "../reference/median.js";
import { fileInputs, openProduct, openSpectrograph } from "./correction.js";
import { finite } from "./finite.js";
import type { SkyChoice } from "./plan.js";
import type { Facts, Job } from "./task.js";

export async function makeCalibrated(job: Job): Promise<Facts> {
  const { version, sky } = job.options as { version: string; sky: SkyChoice };
  const [, { path }] = Object.entries(job.from).find(([name]) => name.startsWith("extracted/"))!;
  const product = await readProduct(path);
  const solution = await openProduct(job, "wavelengths.fits", readWavelengths);
  const hasThroughput = job.from["throughput.fits"] !== undefined;
  const throughput = hasThroughput ? await openProduct(job, "throughput.fits", readThroughput) : undefined;
  const slit = (await openSpectrograph(job))?.slit;
  const digest = product.primaryHeader.text("TRAMGEOM") ?? "";
  const measured = measureZeroPoint(product.spectra, solution);
  const calibrated = calibrateSpectra(product.spectra, digest, {
    ...{ solution, name: product.name, zeroPoint: measured },
    ...(throughput === undefined ? {} : { throughput }),
    ...(sky === "off" ? {} : { skyFibres: (slit?.sky ?? []).map((fibre) => fibre - 1) }),
    scaleLines: sky === "scaled",
  });
  const inputs = ["wavelengths.fits", "throughput.fits"].flatMap((name) => fileInputs(job.from[name]));
  const history = { version, options: [`sky ${sky}`], inputs };
  await writeFits(job.products[0], calibratedProductHdus(product, calibrated, history));
  const { zeroPoint } = calibrated;
  const snr = Array.from(medianSignalToNoise(calibrated.spectra)).filter(Number.isFinite);
  return {
    medianSignalToNoise: finite(median(snr)),
    zeroPointPixels: zeroPoint === null ? null : zeroPoint.pixels,
    zeroPointError: zeroPoint === null ? null : finite(zeroPoint.error),
    ...skyFacts(calibrated.sky),
    warnings: [...zeroPointWarnings(product.name, measured), ...calibrated.warnings],
  };
}

function zeroPointWarnings(name: string, measured: FrameZeroPoint | null): string[] {
  if (measured !== null) return measured.warnings.map((sentence) => `${name}: ${sentence}`);
  return [`${name}: no line of the night sky tells its zero point, so the arc's wavelengths are taken as they are.`];
}

/** What is left of sky fibres when the others foretell them. */
function skyFacts(sky: ReturnType<typeof calibrateSpectra>["sky"]): Facts {
  if (sky === null) return { skyResidual: null, skyPullBetweenLines: null, skyPullAtLines: null };
  const kept = sky.checks.filter((one) => !sky.leftOut.includes(one));
  const middle = (value: (check: (typeof kept)[number]) => number) =>
    finite(median(kept.map(value).filter(Number.isFinite)));
  return {
    skyResidual: middle(({ residual }) => Math.abs(residual)),
    skyPullBetweenLines: middle(({ pullBetween }) => pullBetween),
    skyPullAtLines: middle(({ pullAtLines }) => pullAtLines),
    skyFibres: kept.length,
    skyFibresLeftOut: sky.leftOut.map(({ fibre }) => fibre + 1),
  };
}
