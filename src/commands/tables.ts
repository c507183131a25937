/** hatchel tables: one table a fibre or target. */
import fs from "node:fs";
import { join } from "node:path";
import { type Command, Option } from "commander";
import { readProduct, type SpectraProduct } from "../calibration/spectraProduct.js";
import { Flag } from "../extraction/spectra.js";
import { historyCards } from "../fits/carry.js";
import { FitsError } from "../fits/errors.js";
import { writeFits } from "../fits/write.js";
import { ecsvText, fibreTables, type SpectrumTable, tableHdus, targetTables } from "../report/spectraTables.js";
import { RefusalError } from "./failures.js";
import { addCommonOptions, forceOption } from "./frameOptions.js";
import { checkOutput, uninterrupted, writeText } from "./output.js";
import { type CommonOptions, type Outcome, perform } from "./perform.js";
import type { Progress } from "./progress.js";
import { counted, ranges, textPairs } from "./textTable.js";
import { UsageError } from "./usage.js";
import { version } from "./version.js";

interface TablesOptions extends CommonOptions {
  folder: string;
  form: "ecsv" | "fits";
  fibres?: number[];
  force?: boolean;
}

export function addTables(command: Command): void {
  command
    .description("Writes one table per fibre with light, and per target where the spectra have some.")
    .argument("<SPECTRA>", "spectra that 'hatchel extract', 'combine' or 'rebin' wrote; - is standard input")
    .addOption(new Option("-o, --folder <dir>", "where the tables go; made if need be").makeOptionMandatory())
    .addOption(
      new Option("--form <name>", "ecsv, text with units and metadata, or fits").default("ecsv").argParser((text) => {
        if (text === "ecsv" || text === "fits") return text;
        throw new UsageError(`hatchel: --form is '${text}'; it must be ecsv or fits.`);
      }),
    )
    .addOption(
      new Option("--fibres <list>", "slit positions from 1, as 3,7-12 (default: all with light)").argParser(
        parseFibres,
      ),
    )
    .addOption(forceOption());
  addCommonOptions(command).action((path: string, options: TablesOptions) =>
    perform("tables", options, (progress) => tables(path, options, progress)),
  );
}

async function tables(path: string, options: TablesOptions, progress: Progress): Promise<Outcome<"tables">> {
  const { folder, form, force } = options;
  progress.stage(`reading ${path}`);
  const product = await readProduct(path);
  const { fibres, leftOut } = wantedFibres(product, options.fibres);
  const all = [...fibreTables(product, fibres), ...targetTables(product)];
  requireDifferentNames(all);
  makeFolder(folder);
  const inputs = path === "-" ? [] : [path];
  const pathOf = ({ file }: SpectrumTable) => join(folder, `${file}.${form}`);
  for (const table of all) checkOutput(pathOf(table), { force, inputs });
  progress.stage(`writing ${counted(all.length, "table")}`);
  const history = historyCards(version, [], [{ name: product.name, checksum: product.checksum }]);
  await uninterrupted(async (pause) => {
    for (const table of all) {
      if (form === "ecsv") writeText(pathOf(table), ecsvText(table), { force, inputs });
      else await writeFits(pathOf(table), tableHdus(table, history), { force, inputs });
      await pause();
    }
  });
  const columns = all[0].columns.map(({ name }) => name);
  const json = {
    ...{ folder, spectra: product.name, form, columns, leftOut },
    tables: all.map((table) => ({
      file: `${table.file}.${form}`,
      fibres: table.fibres,
      target: table.target ?? null,
      points: table.columns[0].data.length,
      usable: table.usable,
    })),
  };
  const nTarget = all.length - fibres.length;
  const said: [string, string][] = [
    ["fibres", `${fibres.length}${leftOut.length > 0 ? `; without light, left out: ${ranges(leftOut)}` : ""}`],
    ...(nTarget > 0 ? ([["targets", String(nTarget)]] as [string, string][]) : []),
    ["columns", columns.join(", ")],
  ];
  return {
    json: { ...json, assumptions: [], warnings: mixedTargets(all) },
    text: `${folder}: ${counted(all.length, "table")} of ${product.name}\n${textPairs(said)}`,
  };
}

/** @throws RefusalError for slit positions that are not there. */
function wantedFibres({ name, spectra }: SpectraProduct, wanted: number[] | undefined) {
  const { nFibre, nx, flags } = spectra;
  const beyond = wanted?.find((fibre) => fibre > nFibre);
  if (beyond !== undefined) {
    throw new RefusalError(`${name}: --fibres names slit position ${beyond}, but there are 1 to ${nFibre}`);
  }
  if (wanted !== undefined) return { fibres: wanted, leftOut: [] };
  const isDead = (fibre: number) => flags.subarray((fibre - 1) * nx, fibre * nx).every((bits) => bits & Flag.dead);
  const all = Array.from({ length: nFibre }, (_, k) => k + 1);
  const fibres = all.filter((fibre) => !isDead(fibre));
  if (fibres.length === 0) throw new RefusalError(`${name}: no fibre has light; there is nothing to write`);
  return { fibres, leftOut: all.filter(isDead) };
}

function mixedTargets(all: SpectrumTable[]): string[] {
  return all.flatMap(({ target, columns }) => {
    const wavelength = columns.find(({ name }) => name === "wavelength")?.data;
    if (target === undefined || wavelength === undefined) return [];
    const nMixed = Array.from(wavelength).filter((value) => Number.isNaN(value)).length;
    if (nMixed === 0) return [];
    return [
      `target '${target}': in ${nMixed} of ${wavelength.length} columns its fibres differ in wavelength by over 0.1 px, so that their sum has none there; rebin the spectra first.`,
    ];
  });
}

function requireDifferentNames(all: SpectrumTable[]): void {
  const seen = new Map<string, SpectrumTable>();
  for (const table of all) {
    const other = seen.get(table.file.toLowerCase());
    if (other !== undefined) {
      throw new RefusalError(
        `targets '${other.target}' and '${table.target}' would both go to ${table.file}; give them names that differ in letters or digits`,
      );
    }
    seen.set(table.file.toLowerCase(), table);
  }
}

/** @throws FitsError when it cannot be made. */
function makeFolder(folder: string): void {
  try {
    fs.mkdirSync(folder, { recursive: true });
  } catch {
    throw new FitsError("output", "this folder cannot be made", "give another name", { file: folder });
  }
}

function parseFibres(text: string): number[] {
  const refusal = () =>
    new UsageError(`hatchel: --fibres is '${text}'; it must be slit positions from 1 and ranges of them, as 3,7-12.`);
  const fibres = text.split(",").flatMap((part) => {
    const match = /^\s*(\d{1,6})(?:-(\d{1,6}))?\s*$/.exec(part);
    if (match === null) throw refusal();
    const [from, to] = [Number(match[1]), Number(match[2] ?? match[1])];
    if (from < 1 || to < from) throw refusal();
    return Array.from({ length: to - from + 1 }, (_, i) => from + i);
  });
  return [...new Set(fibres)].sort((a, b) => a - b);
}
