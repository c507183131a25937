/** Spectra of arcs to wavelengths.fits. */
import { measureWavelengths } from "../calibration/arc.js";
import { joinLines, type LineList, lampLines } from "../calibration/lamps.js";
import { readLineFile } from "../calibration/lineFile.js";
import type { Medium } from "../calibration/medium.js";
import { readProduct } from "../calibration/spectraProduct.js";
import { writeWavelengths } from "../calibration/wavelengthFile.js";
import { oneOfEach } from "../oneOfEach.js";
import { summariseWavelengths } from "../report/wavelengths.js";
import type { Spectrograph } from "../spectrograph.js";
import { fileInputs, openSpectrograph, openTramlines } from "./correction.js";
import { finite } from "./finite.js";
import type { Facts, Job } from "./task.js";

export async function makeWavelengths(job: Job): Promise<Facts> {
  const { version } = job.options as { version: string };
  const { wavelength } = (await openSpectrograph(job))!;
  const [range, medium] = [wavelength!.range!, wavelength!.medium ?? "air"];
  const inputs = [...fileInputs(job.inputs.spectrograph[0]), ...fileInputs(job.inputs.lines?.[0])];
  const tramlines = await openTramlines(job, { inputs });
  const arcs = Object.entries(job.from).filter(([name]) => name.startsWith("extracted/"));
  const products = await Promise.all(arcs.map(([, { path }]) => readProduct(path)));
  inputs.push(...products.map(({ name, checksum }) => ({ name, checksum })));
  const result = measureWavelengths(products, tramlines, await lineList(job, wavelength!, medium), range);
  await writeWavelengths(job.products[0], result, {
    ...{ version, inputs, header: products[0].primaryHeader },
    options: [
      `range ${range.join(" ")}`,
      `medium ${medium}`,
      ...(wavelength!.lamps.length > 0 ? [`lamps ${wavelength!.lamps.join(" ")}`] : []),
    ],
  });
  const summary = summariseWavelengths(result);
  return {
    arcs: products.map(({ name }) => name),
    lines: result.identification.matches.length,
    rmsPixels: finite(summary.rmsPixels),
    rmsKilometresPerSecond: finite(summary.rmsKilometresPerSecond),
    worstRmsPixels: finite(summary.worstRmsPixels),
    worstFibre: summary.worstFibre,
    fwhmPixels: finite(summary.fwhmPixels),
    warnings: oneOfEach(result.warnings),
  };
}

type Known = NonNullable<Spectrograph["wavelength"]>;

async function lineList({ inputs }: Job, { lamps }: Known, medium: Medium): Promise<LineList> {
  const [file] = inputs.lines ?? [];
  const own = file === undefined ? [] : [await readLineFile(file.path)];
  return joinLines([...(lamps.length > 0 ? [lampLines(lamps, undefined, medium)] : []), ...own], medium);
}
