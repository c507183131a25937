/** Spectra to one table a fibre, and a target, in a folder of their own. */
import { writeFileSync } from "node:fs";
import { join } from "node:path";
import { readProduct, type SpectraProduct } from "../calibration/spectraProduct.js";
import { Flag } from "../extraction/spectra.js";
import { historyCards } from "../fits/carry.js";
import { writeFits } from "../fits/write.js";
import { ecsvText, fibreTables, tableHdus, targetTables } from "../report/spectraTables.js";
import type { Facts, Job } from "./task.js";

interface Options {
  version: string;
  form: "ecsv" | "fits";
}

export async function makeTables({ from, folder, options }: Job): Promise<Facts> {
  const { version, form } = options as unknown as Options;
  const [{ path }] = Object.values(from);
  const product = await readProduct(path);
  const tables = [...fibreTables(product, fibresWithLight(product)), ...targetTables(product)];
  const history = historyCards(version, [], [{ name: product.name, checksum: product.checksum }]);
  for (const table of tables) {
    const name = join(folder!, `${table.file}.${form}`);
    if (form === "ecsv") writeFileSync(name, ecsvText(table));
    else await writeFits(name, tableHdus(table, history));
  }
  return { spectra: product.name, tables: tables.length };
}

/** Slit positions, from 1. */
function fibresWithLight({ spectra: { nFibre, nx, flags } }: SpectraProduct): number[] {
  const all = Array.from({ length: nFibre }, (_, k) => k + 1);
  return all.filter((fibre) => flags.subarray((fibre - 1) * nx, fibre * nx).some((bits) => (bits & Flag.dead) === 0));
}
