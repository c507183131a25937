import fs from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { describe, expect, test } from "vitest";
import { inputCards } from "../../src/fits/carry.js";
import { listHdus } from "../../src/fits/open.js";
import { writeFits } from "../../src/fits/write.js";
import { fitsverify, judgeMissing } from "../judges.js";

const SAMPLES = "/usr/lib/python3/dist-packages/astropy/io/fits/tests/data";
const frames = new URL("../../../shared/frames/ugly/", import.meta.url).pathname;
const files = [SAMPLES, frames].flatMap((folder) =>
  fs.existsSync(folder)
    ? fs
        .readdirSync(folder)
        .filter((name) => /\.fits/.test(name))
        .map((name) => join(folder, name))
    : [],
);

describe.skipIf(judgeMissing("fitsverify") || files.length === 0)("headers of other people's files", () => {
  test.each(files)("%s: carried over, they make a product that fitsverify finds sound", async (path) => {
    const listed = await listHdus(path).catch(() => undefined);
    const folder = fs.mkdtempSync(join(tmpdir(), "hatchel-carry-"));
    const complaints = [];
    for (const hdu of listed?.hdus ?? []) {
      const product = join(folder, `${hdu.index}.fits`);
      await writeFits(product, [
        { kind: "primary", header: inputCards(hdu.header) },
        { kind: "image", name: "FLUX", unit: "electron", nx: 2, ny: 3, data: Float32Array.of(1, 2, 3, 4, 5, 6) },
      ]);
      complaints.push(...fitsverify(product).map((complaint) => `HDU ${hdu.index}: ${complaint}`));
    }
    fs.rmSync(folder, { recursive: true });
    expect(complaints).toEqual([]);
  });
});
