/** hatchel rebin: spectra of all fibres on one wavelength grid. */
import { type Command, Option } from "commander";
import { type GridRequest, gridWavelength, LIGHT_SPEED, makeGrid, type SpectralGrid } from "../calibration/grid.js";
import { inMedium, type Medium } from "../calibration/medium.js";
import type { Reconstruction } from "../calibration/overlaps.js";
import { type RebinnedSpectra, rebinSpectra } from "../calibration/rebin.js";
import { rebinnedHdus } from "../calibration/rebinFile.js";
import { type PixelWavelengths, readProduct, type SpectraProduct } from "../calibration/spectraProduct.js";
import { UNUSABLE } from "../extraction/spectra.js";
import { writeFits } from "../fits/write.js";
import { median } from "../reference/median.js";
import { RefusalError } from "./failures.js";
import { addCommonOptions, forceOption, outputOption } from "./frameOptions.js";
import { checkOutput, uninterrupted } from "./output.js";
import { type CommonOptions, type Outcome, perform } from "./perform.js";
import type { Progress } from "./progress.js";
import { fixed, percentage, textPairs } from "./textTable.js";
import { UsageError } from "./usage.js";
import { version } from "./version.js";

interface RebinCommandOptions extends CommonOptions {
  output: string;
  force?: boolean;
  grid: "linear" | "log";
  medium?: Medium;
  start?: number;
  end?: number;
  step?: { value: number; unit: "Å" | "km/s" | "ln" };
  bins?: number;
  reconstruction: Reconstruction;
  mostLost: number;
}

export function addRebin(command: Command): void {
  command
    .description(
      "Puts the spectra of all fibres on one wavelength grid, counts conserved. Neighbouring bins then share noise (BIN_COV): on their own pixels errors are independent, so fit there where you can, and rebin last.",
    )
    .argument("<SPECTRA>", "calibrated spectra that 'hatchel extract' or 'hatchel combine' wrote; - is standard input")
    .addOption(outputOption("rebinned spectra").makeOptionMandatory())
    .addOption(
      choice("--grid <kind>", "linear in wavelength, or log: even in velocity", ["linear", "log"]).default("linear"),
    )
    .addOption(choice("--medium <name>", "air or vacuum (default: that of the spectra)", ["air", "vacuum"]))
    .addOption(number("--start <Å>", "middle of the first bin (default: the lowest wavelength of all fibres)"))
    .addOption(number("--end <Å>", "middle of the last bin (default: the highest)"))
    .addOption(
      new Option(
        "--step <step>",
        "0.5 or 0.5A for linear; 30km/s, or 1e-4ln in the natural logarithm, for log (default: the median dispersion)",
      ).argParser(parseStep),
    )
    .addOption(number("--bins <n>", "how many bins, in the place of --step or --end"))
    .addOption(
      choice(
        "--reconstruction <kind>",
        "how light lies within a pixel: constant, or parabolic, which broadens lines less but may swing below 0 beside sharp ones",
        ["constant", "parabolic"],
      ).default("constant"),
    )
    .addOption(
      number(
        "--most-lost <share>",
        "share of a bin without usable pixels up to which the rest makes good for it; beyond, the bin has no value",
      ).default(0.1),
    )
    .addOption(forceOption());
  addCommonOptions(command).action((path: string, options: RebinCommandOptions) =>
    perform("rebin", options, (progress) => rebin(path, options, progress)),
  );
}

async function rebin(path: string, options: RebinCommandOptions, progress: Progress): Promise<Outcome<"rebin">> {
  const { output, force, reconstruction, mostLost } = options;
  const request = gridRequest(options);
  const inputs = path === "-" ? [] : [path];
  checkOutput(output, { force, inputs });
  progress.stage(`reading ${path}`);
  const product = await readProduct(path);
  const wavelengths = wavelengthsIn(product, options.medium);
  const grid = makeGrid(request, wavelengths.image, product.spectra.nx, wavelengths.medium);
  progress.stage(`rebinning ${product.name}`);
  const rebinned = rebinSpectra(product, wavelengths, grid, { reconstruction, mostLost });
  const history = {
    version,
    options: historyLines(grid, options),
    inputs: [{ name: product.name, checksum: product.checksum }],
  };
  await uninterrupted(() => writeFits(output, rebinnedHdus(product, rebinned, history), { force, inputs }));
  const figures = figuresOf(rebinned, wavelengths);
  const json = { output, spectra: product.name, grid: gridJson(grid), reconstruction, mostLost, ...figures };
  return {
    json: { ...json, assumptions: [], warnings: [] },
    text: `${output === "-" ? "standard output" : output}: ${product.name} rebinned\n${textPairs(facts(json))}`,
  };
}

/** @throws RefusalError for spectra without wavelengths, or rebinned before. */
function wavelengthsIn({ name, rebinned, wavelengths }: SpectraProduct, medium: Medium | undefined): PixelWavelengths {
  if (wavelengths === undefined) {
    throw new RefusalError(
      `${name}: there are no wavelengths (HDU WAVELENGTH); extract the frame with --wavelengths to have them`,
    );
  }
  if (rebinned) {
    throw new RefusalError(
      `${name}: these spectra were rebinned before, and would be broadened twice; rebin those that they were made from`,
    );
  }
  return inMedium(wavelengths, medium ?? wavelengths.medium);
}

/** @throws UsageError for a step whose unit does not go with the grid. */
function gridRequest({ grid, start, end, step, bins }: RebinCommandOptions): GridRequest {
  if (step !== undefined && (step.unit === "Å") !== (grid === "linear")) {
    const remedy = grid === "linear" ? "give it in Å, or --grid log" : "give it as 30km/s or 1e-4ln, or --grid linear";
    throw new UsageError(`hatchel rebin: --step is in ${step.unit}, but the grid is ${grid}; ${remedy}.`);
  }
  const own = step?.unit === "km/s" ? step.value / LIGHT_SPEED : step?.value;
  return { kind: grid, start, end, step: own, number: bins };
}

function parseStep(text: string): RebinCommandOptions["step"] {
  const match = /^([0-9.]+(?:e[-+]?\d+)?)\s*(A|Å|km\/s|ln)?$/i.exec(text.trim());
  const value = Number(match?.[1]);
  if (match === null || !(value > 0)) {
    throw new UsageError(`hatchel: --step is '${text}'; it must be a number over 0, as 0.5, 30km/s or 1e-4ln.`);
  }
  const unit = match[2]?.toLowerCase();
  return { value, unit: unit === "km/s" ? "km/s" : unit === "ln" ? "ln" : "Å" };
}

function historyLines(grid: SpectralGrid, { reconstruction, mostLost }: RebinCommandOptions): string[] {
  return [
    `grid ${grid.kind} ${grid.medium} start ${grid.start} step ${grid.step} bins ${grid.n}`,
    `reconstruction ${reconstruction}`,
    `most-lost ${mostLost}`,
  ];
}

function gridJson(grid: SpectralGrid) {
  return {
    ...{ kind: grid.kind, medium: grid.medium, start: grid.start, end: gridWavelength(grid, grid.n - 1) },
    ...{ step: grid.step, kmPerSecond: grid.kind === "log" ? grid.step * LIGHT_SPEED : null, bins: grid.n },
  };
}

function figuresOf({ spectra, binCovariance, neglected }: RebinnedSpectra, { image }: PixelWavelengths) {
  const { nFibre, nx, flags, flux, variance } = spectra;
  const perFibre = image.length / nFibre;
  const correlations: number[] = [];
  let [fibres, usablePoints] = [0, 0];
  for (let k = 0; k < nFibre; k++) {
    if (Number.isNaN(image[k * perFibre])) continue;
    fibres++;
    for (let i = k * nx; i < (k + 1) * nx; i++) {
      if ((flags[i] & UNUSABLE) === 0 && Number.isFinite(flux[i])) usablePoints++;
      const correlation = binCovariance[i] / Math.sqrt(variance[i] * variance[i + 1]);
      if (i % 7 === 0 && Number.isFinite(correlation)) correlations.push(correlation);
    }
  }
  return {
    ...{ fibres, usablePoints, points: fibres * nx },
    neighbourCorrelation: median(correlations),
    neglectedShare: neglected,
  };
}

function facts(json: Omit<Outcome<"rebin">["json"], "assumptions" | "warnings">): [string, string][] {
  const { grid } = json;
  const step =
    grid.kind === "linear"
      ? `${grid.step.toPrecision(6)} Å`
      : `${grid.step.toPrecision(6)} in ln λ (${fixed(grid.kmPerSecond, 3)} km/s)`;
  return [
    ["grid", `${grid.kind}, ${grid.bins} bins, ${fixed(grid.start, 3)} to ${fixed(grid.end, 3)} Å in ${grid.medium}`],
    ["step", step],
    ["light in a pixel", json.reconstruction],
    ["usable points", `${json.usablePoints} of ${json.points} (${percentage(json.usablePoints / json.points, 2)})`],
    [
      "shared noise",
      `correlation ${fixed(json.neighbourCorrelation, 3)} with the next bin (BIN_COV); bins beyond add ${percentage(json.neglectedShare, 1)} of a bin's variance to a wide sum's`,
    ],
  ];
}

function choice(flags: string, description: string, known: string[]): Option {
  const name = flags.split(" ")[0];
  return new Option(flags, description).argParser((text) => {
    if (known.includes(text)) return text;
    throw new UsageError(`hatchel: ${name} is '${text}'; it must be ${known.join(" or ")}.`);
  });
}

function number(flags: string, description: string): Option {
  const name = flags.split(" ")[0];
  return new Option(flags, description).argParser((text) => {
    const value = Number(text);
    if (text.trim() !== "" && Number.isFinite(value) && value >= 0) return value;
    throw new UsageError(`hatchel: ${name} is '${text}'; it must be a number, 0 or more.`);
  });
}
