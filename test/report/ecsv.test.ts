import { mkdtempSync, rmSync, writeFileSync } from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { afterAll, expect, it } from "vitest";
import { openStream } from "../../src/random/streams.js";
import { type EcsvColumn, ecsv } from "../../src/report/ecsv.js";
import { judgeMissing, python } from "../judges.js";

const folder = mkdtempSync(join(tmpdir(), "hatchel-ecsv-"));
afterAll(() => rmSync(folder, { recursive: true }));

const stream = openStream(1, "ecsv");
/** Of every size, with the awkward ones in front. */
const awkward = [
  0,
  -0,
  Number.NaN,
  Number.POSITIVE_INFINITY,
  Number.NEGATIVE_INFINITY,
  5e-324,
  1e300,
  0.1,
  1 / 3,
  1e21,
];
const wild = Array.from(
  { length: 3000 },
  () => (stream.uniform() - 0.5) * 10 ** Math.floor(60 * stream.uniform() - 30),
);
const doubles = Float64Array.from([...awkward, ...wild]);
const columns: EcsvColumn[] = [
  { name: "wavelength", type: "float64", unit: "Angstrom", description: 'in "air"', data: doubles },
  {
    name: "flux",
    type: "float32",
    unit: "electron",
    description: "per column: x # y",
    data: Float32Array.from(doubles),
  },
  { name: "flags", type: "int32", description: "bits", data: Int32Array.from(doubles, (_, i) => 4096 * i - 7) },
];
const meta = [
  ["object", 'M 1: it\'s "here" # and [there]'],
  ["fibre", 12],
  ["rebinned", true],
  ["seconds", 900.25],
] as [string, string | number | boolean][];

const script = `
import json, sys
import numpy as np
from astropy.table import Table
t = Table.read(sys.argv[1], format="ascii.ecsv")
print(json.dumps({
    "names": t.colnames, "types": [str(t[n].dtype) for n in t.colnames],
    "units": [None if t[n].unit is None else str(t[n].unit) for n in t.colnames],
    "said": [t[n].description for n in t.colnames], "meta": list(t.meta.items()),
    "masked": bool(t.has_masked_values),
    "bytes": [np.asarray(t[n]).astype(t[n].dtype.newbyteorder("<")).tobytes().hex() for n in t.colnames],
}))
`;

it.skipIf(judgeMissing("astropy"))("astropy reads the same bits, units, descriptions and metadata", () => {
  const path = join(folder, "a.ecsv");
  writeFileSync(path, ecsv(columns, meta));
  const seen = JSON.parse(python(script, [path]));
  expect(seen.names).toEqual(["wavelength", "flux", "flags"]);
  expect(seen.types).toEqual(["float64", "float32", "int32"]);
  expect(seen.units).toEqual(["Angstrom", "electron", null]);
  expect(seen.said).toEqual(columns.map(({ description }) => description));
  expect(seen.meta).toEqual(meta);
  expect(seen.masked).toBe(false);
  columns.forEach(({ data, type }, c) => {
    const own = { float64: Float64Array, float32: Float32Array, int32: Int32Array }[type].from(data);
    // One NaN is as good as another.
    const hex = (bytes: Buffer) => bytes.toString("hex").replaceAll("000000000000f8ff", "000000000000f87f");
    expect(hex(Buffer.from(seen.bytes[c], "hex")) === hex(Buffer.from(own.buffer)), type).toBe(true);
  });
});
