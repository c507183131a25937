/** Spectra to the same on one wavelength grid. */
import { LIGHT_SPEED, makeGrid } from "../calibration/grid.js";
import { rebinSpectra } from "../calibration/rebin.js";
import { rebinnedHdus } from "../calibration/rebinFile.js";
import { readProduct } from "../calibration/spectraProduct.js";
import { writeFits } from "../fits/write.js";
import type { Facts, Job } from "./task.js";

interface Options {
  version: string;
  grid: "linear" | "log";
  /** Å for linear, km/s for log. */
  step: number | null;
  range: [number, number] | null;
}

export async function makeRebinned(job: Job): Promise<Facts> {
  const { version, grid: kind, step, range } = job.options as unknown as Options;
  const product = await readProduct(Object.values(job.from)[0].path);
  const wavelengths = product.wavelengths!;
  const request = {
    kind,
    start: range?.[0],
    end: range?.[1],
    step: step === null ? undefined : kind === "log" ? step / LIGHT_SPEED : step,
  };
  const grid = makeGrid(request, wavelengths.image, product.spectra.nx, wavelengths.medium);
  const rebinned = rebinSpectra(product, wavelengths, grid, {});
  await writeFits(
    job.products[0],
    rebinnedHdus(product, rebinned, {
      version,
      options: [`grid ${grid.kind} ${grid.medium} start ${grid.start} step ${grid.step} bins ${grid.n}`],
      inputs: [{ name: product.name, checksum: product.checksum }],
    }),
  );
  return { spectra: product.name, grid: kind, startAngstrom: grid.start, step: grid.step, bins: grid.n };
}
