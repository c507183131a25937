/** Tables and numbers for people. */
import { describe, expect, test } from "vitest";
import { counted, fixed, percentage, ranges, textPairs, textTable } from "../../src/commands/textTable.js";

describe("text", () => {
  test("tables line up, the first column to the left", () => {
    const table = textTable([
      ["name", "n", "share"],
      ["a", "12", "0.5 %"],
      ["longer", "3", "–"],
    ]);
    expect(table.split("\n")).toEqual(["  name     n  share", "  a       12  0.5 %", "  longer   3      –"]);
    expect(
      textPairs([
        ["a", "1"],
        ["bcd", "2"],
      ]),
    ).toBe("  a    1\n  bcd  2");
  });

  test("what does not exist is a dash, never a 0", () => {
    for (const none of [Number.NaN, null, undefined, Number.POSITIVE_INFINITY]) {
      expect([fixed(none, 2), percentage(none)]).toEqual(["–", "–"]);
    }
    expect(fixed(-1.005, 1)).toBe("-1.0");
  });

  test("small shares keep two digits, and what rounding left is 0", () => {
    expect([0.1234, 0.01, 4.3e-6, -2e-5, 1e-17, 0].map((share) => percentage(share))).toEqual([
      ...["12.3 %", "1.0 %", "0.00043 %", "-0.0020 %", "0.0 %", "0.0 %"],
    ]);
  });

  test("numbers in a row are a range", () => {
    expect(ranges([3, 4, 5, 9, 11, 12])).toBe("3-5, 9, 11-12");
    expect([ranges([]), ranges([7])]).toEqual(["", "7"]);
    expect([counted(1, "fibre"), counted(0, "fibre")]).toEqual(["1 fibre", "0 fibres"]);
  });
});
