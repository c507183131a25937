/** The sample files that Debian's python3-astropy brings along, some of them odd on purpose: the same numbers as astropy, or a
 * refusal that says why. */
import fs from "node:fs";
import { join } from "node:path";
import { describe, expect, test } from "vitest";
import { FitsError } from "../../src/fits/errors.js";
import { readImage } from "../../src/fits/image.js";
import { readTable } from "../../src/fits/table.js";
import { judgeMissing, python } from "../judges.js";

const SAMPLES = "/usr/lib/python3/dist-packages/astropy/io/fits/tests/data";

const READ_ALL = `
import sys, os, json, numpy as np
from astropy.io import fits
def clean(a):
    a = np.asarray(a)
    if a.dtype.itemsize == 0: return [''] * len(a)
    if a.dtype.kind in 'SU': return [str(x).rstrip() for x in a.ravel()]
    if a.dtype.kind == 'b': return [bool(x) for x in a.ravel()]
    return [None if not np.isfinite(x) else float(x) for x in a.ravel()]
out = []
for name in sorted(os.listdir(sys.argv[1])):
    path = os.path.join(sys.argv[1], name)
    if not os.path.isfile(path) or '.fits' not in name: continue
    with fits.open(path, ignore_missing_end=True) as hdus:
        for i, hdu in enumerate(hdus):
            one = {'file': name, 'hdu': i, 'kind': type(hdu).__name__}
            try:
                if hdu.is_image and not isinstance(hdu, fits.GroupsHDU) and hdu.data is not None:
                    one['shape'] = list(hdu.data.shape)
                    one['values'] = clean(hdu.data)
                elif isinstance(hdu, fits.BinTableHDU):
                    one['columns'] = {n: clean(hdu.data[n]) for n in hdu.columns.names if not hdu.columns[n].format.lstrip('0123456789')[0] in 'PQXCM'}
            except Exception as e:
                one['failed'] = str(e)
            out.append(one)
print(json.dumps(out))
`;

interface Sample {
  file: string;
  hdu: number;
  kind: string;
  shape?: number[];
  values?: (number | null)[];
  columns?: Record<string, unknown[]>;
  failed?: string;
}

/** null where there is no value; relative difference within single precision, in which astropy scales 16 bits and less. */
function expectSame(found: ArrayLike<unknown>, expected: unknown[], what: string): void {
  expect(found.length, what).toBe(expected.length);
  for (let i = 0; i < expected.length; i++) {
    const [a, b] = [found[i], expected[i]];
    if (typeof b !== "number" || typeof a !== "number")
      expect(Number.isFinite(a) || typeof a !== "number" ? a : null, `${what}[${i}]`).toBe(b);
    else if (Math.abs(a - b) > 1.2e-7 * Math.abs(b)) expect(a, `${what}[${i}]`).toBe(b);
  }
}

const IMAGE = "give an image of two axes.";
const COLUMNS = "which are not read; ask for the other columns by name.";
const REFUSED: Record<string, string> = {
  "arange.fits 0": `HDU 0: the HDU holds 11 × 10 × 7 pixels; ${IMAGE}`,
  "ascii.fits 1": "HDU 1: this is an ASCII table, not a binary table; choose another HDU.",
  "ascii_i4-i20.fits 1": "HDU 1: this is an ASCII table, not a binary table; choose another HDU.",
  "chandra_time.fits 1": `HDU 1: column status holds bits (32X), ${COLUMNS}`,
  "compressed_float_bzero.fits 1": `HDU 1: the HDU holds 3 pixels; ${IMAGE}`,
  "group.fits 0": "HDU 0: this is the primary HDU, not a binary table; choose another HDU.",
  "memtest.fits 1": `HDU 1: column QUALITY holds bits (69X), ${COLUMNS}`,
  "random_groups.fits 0": "HDU 0: this is the primary HDU, not a binary table; choose another HDU.",
  "theap-gap.fits 1": `HDU 1: column arr holds arrays of variable length (PJ(5)), ${COLUMNS}`,
  "variable_length_table.fits 1": `HDU 1: column var holds arrays of variable length (PI(3)), ${COLUMNS}`,
  "zerowidth.fits 0": `HDU 0: the HDU holds 777777701 × 0 pixels; ${IMAGE}`,
};

describe.skipIf(judgeMissing("astropy") || !fs.existsSync(SAMPLES))("astropy's sample files", () => {
  test("the same numbers, or a refusal by name", async () => {
    const samples: Sample[] = JSON.parse(python(READ_ALL, [SAMPLES]));
    const refused: Record<string, string> = {};
    let nImages = 0;
    let nColumns = 0;
    for (const sample of samples) {
      const what = `${sample.file} ${sample.hdu}`;
      const path = join(SAMPLES, sample.file);
      try {
        if (sample.values) {
          const image = await readImage(path, { hdu: sample.hdu });
          expect([image.ny, image.nx], what).toEqual(sample.shape!.slice(-2));
          expectSame(image.data, sample.values, what);
          nImages++;
        } else if (/Table|Groups/.test(sample.kind)) {
          const table = await readTable(path, sample.hdu);
          for (const column of table.columns) {
            expectSame(column.data, sample.columns![column.name], `${what} ${column.name}`);
            nColumns++;
          }
        }
      } catch (error) {
        if (!(error instanceof FitsError)) throw error;
        refused[what] = error.message.slice(path.length + 2);
      }
    }
    expect(refused).toEqual(REFUSED);
    expect(nImages).toBeGreaterThanOrEqual(18);
    expect(nColumns).toBeGreaterThanOrEqual(125);
  });
});
