import { mkdtemp, rm, writeFile } from "node:fs/promises";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { describe, expect, it } from "vitest";
import { CalibrationError } from "../../src/calibration/errors.js";
import { parseLineFile, readLineFile } from "../../src/calibration/lineFile.js";

const parse = (text: string) => parseLineFile(text, "lines.txt");

describe("an observer's own line list", () => {
  it("is read in any order, with blanks, commas, comments and things unknown", () => {
    const list = parse(
      "\uFEFF# neon, by hand\r\nMedium: Air\r\n 5881.895, 25, Ne I # second\r\n\r\n5852.488\t55 Ne\r\n5944.834\n6030 -  Ne\n",
    );
    expect(list).toEqual({
      wavelength: Float64Array.of(5852.488, 5881.895, 5944.834, 6030),
      medium: "air",
      strength: Float64Array.of(55, 25, Number.NaN, Number.NaN),
      lamp: ["Ne", "Ne I", "", "Ne"],
      source: "lines.txt",
    });
    expect(parse("medium vacuum\n5000\n6000").medium).toBe("vacuum");
  });

  it.each([
    [
      "5852.488\nmedium air",
      "lines.txt, line 1: wavelengths begin before a line says 'medium air' or 'medium vacuum', which differ by over an ångström; put that line first.",
    ],
    [
      "medium water\n5000\n6000",
      "lines.txt, line 1: the medium is 'water', but 'air' or 'vacuum' was expected; correct it.",
    ],
    ["medium\n5000", "lines.txt, line 1: the medium is missing, but 'air' or 'vacuum' was expected; correct it."],
    ["medium air\nmedium air", "lines.txt, line 2: the medium is given twice; keep one of the two lines."],
    [
      "medium air\n585.2488 5",
      "lines.txt, line 2: found '585.2488' where a wavelength from 2000 to 25000 Å was expected; is it in nm? Write it in Å.",
    ],
    [
      "medium air\n\nneon 5",
      "lines.txt, line 3: found 'neon' where a wavelength from 2000 to 25000 Å was expected; correct that line.",
    ],
    [
      "medium air\n0x1700",
      "lines.txt, line 2: found '0x1700' where a wavelength from 2000 to 25000 Å was expected; correct that line.",
    ],
    [
      "medium air\n5852 Ne",
      "lines.txt, line 2: found 'Ne' where a strength over 0 was expected; correct it, or write '-' where it is not known.",
    ],
    [
      "medium air\n5852 0",
      "lines.txt, line 2: found '0' where a strength over 0 was expected; correct it, or write '-' where it is not known.",
    ],
    ["medium air\n5852\n5900\n5852 7", "lines.txt, line 4: 5852 Å is listed twice; leave one of the two lines out."],
    [
      "medium air\n5852",
      "lines.txt: holds 1 lines, but a line 'medium air' or 'medium vacuum' and at least 2 wavelengths in Å were expected; add them.",
    ],
    [
      "",
      "lines.txt: holds 0 lines, but a line 'medium air' or 'medium vacuum' and at least 2 wavelengths in Å were expected; add them.",
    ],
  ])("%j is refused", (text, sentence) => {
    expect(() => parse(text)).toThrow(new CalibrationError(sentence));
  });

  it("comes from a file", async () => {
    const folder = await mkdtemp(join(tmpdir(), "hatchel-lines-"));
    try {
      await writeFile(join(folder, "own.txt"), "medium air\n5852.488\n5881.895\n");
      expect((await readLineFile(join(folder, "own.txt"))).wavelength).toHaveLength(2);
      await expect(readLineFile(join(folder, "none.txt"))).rejects.toThrow(
        "none.txt: there is no such file, but a list of arc lines was expected; check 'wavelength.lines'.",
      );
    } finally {
      await rm(folder, { recursive: true });
    }
  });
});
