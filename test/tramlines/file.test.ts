import { mkdtempSync, readFileSync, rmSync, writeFileSync } from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { afterAll, beforeAll, describe, expect, it } from "vitest";
import { encodeFits } from "../../src/fits/encode.js";
import { Header } from "../../src/fits/header.js";
import { readTramlines, tramlinesHdus, writeTramlines } from "../../src/tramlines/file.js";
import type { Tramlines } from "../../src/tramlines/tramlines.js";
import { fitsverify, judgeMissing, python } from "../judges.js";

let folder: string;
beforeAll(() => {
  folder = mkdtempSync(join(tmpdir(), "tramlines-"));
});
afterAll(() => {
  rmSync(folder, { recursive: true });
});

/** Three fibres, every number different, the middle one dead. */
const tramlines: Tramlines = {
  nx: 640,
  ny: 57,
  nFibre: 3,
  degree: 2,
  fibre: Int32Array.of(1, 2, 3),
  state: ["lit", "dead", "dim"],
  block: Int32Array.of(1, 1, 2),
  legendre: Float64Array.of(10.25, 1 / 3, -0.125, 15.5, 0.375, -0.25, 26.75, Math.PI, -0.0625),
  seenFrom: Int32Array.of(0, 0, 16),
  seenTo: Int32Array.of(639, -1, 611),
  rms: Float64Array.of(0.003, Number.NaN, 0.021),
  nPoint: Int32Array.of(80, 0, 71),
  profile: {
    kind: "gaussian",
    sigma: Float64Array.of(1.04, 0.01, 1.05, 0.02, 1.06, 0.03),
    widthDegree: 1,
    relativeError: 0.0173,
  },
  geometryDigest: "0123456789abcdef",
};
const options = {
  version: "9.9.9",
  options: ["degree auto"],
  inputs: [{ name: "flat_07.fits", checksum: "12345" }],
  header: new Header([
    { keyword: "OBJECT", value: "fibreflat", comment: "what was seen" },
    { keyword: "NAXIS1", value: 640, comment: "structure is not carried over" },
  ]),
};

describe("the tramlines file", () => {
  it("gives back every number that was written", async () => {
    const path = join(folder, "round.fits");
    await writeTramlines(path, tramlines, options);
    expect(await readTramlines(path)).toEqual(tramlines);
  });

  it("holds the same bytes every time", () => {
    expect(encodeFits(tramlinesHdus(tramlines, options))).toEqual(encodeFits(tramlinesHdus(tramlines, options)));
  });

  it("is refused by its reader when it holds something else", async () => {
    const bytes = (change: Partial<Tramlines>) => encodeFits(tramlinesHdus({ ...tramlines, ...change }, options));
    const read = (change: Partial<Tramlines>) => readTramlines(bytes(change), "t.fits");
    await expect(read({ state: ["lit", "odd" as "dim", "dim"] })).rejects.toThrow(
      "t.fits: state odd of a fibre, but lit, dim or dead is expected; trace the flat again.",
    );
    await expect(read({ fibre: Int32Array.of(1, 3, 4) })).rejects.toThrow(
      "t.fits: row 2 is fibre 3, but rows must follow the slit from 1; trace the flat again.",
    );
    const broken = Float64Array.from(tramlines.legendre);
    broken[4] = Number.NaN;
    await expect(read({ legendre: broken })).rejects.toThrow("t.fits: coefficients or sizes are missing or not finite");
    const newer = Buffer.from(bytes({}))
      .toString("latin1")
      .replace(/TRAMVERS= {20}1/, `TRAMVERS=${"7".padStart(21)}`);
    await expect(readTramlines(Buffer.from(newer, "latin1"), "t.fits")).rejects.toThrow(
      "t.fits: format 7, but 1 is the newest known; trace the flat again with this program.",
    );
    const path = join(folder, "other.fits");
    writeFileSync(path, encodeFits([{ kind: "primary", header: [] }]));
    await expect(readTramlines(path)).rejects.toThrow(/TRAMLINES/);
  });

  it("is not written over a file that is there", async () => {
    const path = join(folder, "kept.fits");
    await writeTramlines(path, tramlines, options);
    const before = readFileSync(path);
    await expect(writeTramlines(path, { ...tramlines, nx: 1 }, options)).rejects.toThrow("this file exists already");
    expect(readFileSync(path).equals(before)).toBe(true);
  });

  it.skipIf(judgeMissing("fitsverify"))("has no fault that fitsverify finds", async () => {
    const path = join(folder, "verify.fits");
    await writeTramlines(path, tramlines, options);
    expect(fitsverify(path)).toEqual([]);
  });

  it.skipIf(judgeMissing("astropy"))("reads in astropy as laid down: columns, types, cards, checksums", async () => {
    const path = join(folder, "astropy.fits");
    await writeTramlines(path, tramlines, options);
    const script = `
import sys, json
from astropy.io import fits
with fits.open(sys.argv[1], checksum=True) as f:
    t = f['TRAMLINES']
    print(json.dumps({
        'names': [h.name for h in f], 'columns': t.columns.names, 'formats': t.columns.formats,
        'state': [s.strip() for s in t.data['STATE']], 'legendre': t.data['LEGENDRE'].tolist(),
        'origin': t.header['PIXORIG'], 'digest': f[0].header['TRAMGEOM'], 'object': f[0].header['OBJECT'],
        'history': list(f[0].header['HISTORY']), 'rms1': str(t.data['RMS'][1]), 'npoint': t.data['NPOINT'].tolist(),
        'sigma': f['PROFILE'].data['SIGMA'].tolist(), 'error': f['PROFILE'].header['PROFERR']}))
`;
    expect(JSON.parse(python(script, [path]))).toEqual({
      names: ["PRIMARY", "TRAMLINES", "PROFILE"],
      columns: ["FIBRE", "STATE", "BLOCK", "LEGENDRE", "SEEN_FROM", "SEEN_TO", "RMS", "NPOINT", "ERROR"],
      formats: ["1J", "8A", "1J", "3D", "1J", "1J", "1D", "1J", "1D"],
      state: ["lit", "dead", "dim"],
      legendre: [
        [10.25, 1 / 3, -0.125],
        [15.5, 0.375, -0.25],
        [26.75, Math.PI, -0.0625],
      ],
      origin: 0,
      digest: "0123456789abcdef",
      object: "fibreflat",
      history: ["made by hatchel 9.9.9", "option degree auto", "input flat_07.fits checksum 12345"],
      rms1: "nan",
      npoint: [80, 0, 71],
      sigma: [
        [1.04, 0.01],
        [1.05, 0.02],
        [1.06, 0.03],
      ],
      error: 0.0173,
    });
  });
});
