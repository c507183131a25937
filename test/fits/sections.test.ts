import { describe, expect, test } from "vitest";
import { formatSection, parseSection, sectionSize } from "../../src/fits/sections.js";

describe("FITS sections", () => {
  test("count from 1, both ends included", () => {
    const section = parseSection(" [ 33:1056 , 1:910]");
    expect(section).toEqual({ x1: 33, x2: 1056, y1: 1, y2: 910 });
    expect(sectionSize(section)).toEqual({ nx: 1024, ny: 910 });
    expect(formatSection(section)).toBe("[33:1056,1:910]");
  });

  test("a section may fill the image to its last pixel", () => {
    expect(parseSection("[2:40,3:30]", "DATASEC", 40, 30)).toEqual({ x1: 2, x2: 40, y1: 3, y2: 30 });
  });

  test.each([
    ["33:1056,1:910", 'DATASEC1: "33:1056,1:910" is not a section; write it as [x1:x2,y1:y2].'],
    ["[1:2]", 'DATASEC1: "[1:2]" is not a section; write it as [x1:x2,y1:y2].'],
    ["[*,1:2]", 'DATASEC1: "[*,1:2]" is not a section; write it as [x1:x2,y1:y2].'],
    ["[1:2,-1:2]", 'DATASEC1: "[1:2,-1:2]" is not a section; write it as [x1:x2,y1:y2].'],
    ["[0:5,1:2]", 'DATASEC1: "[0:5,1:2]" starts at x = 0, but sections count from 1.'],
    ["[1:5,0:2]", 'DATASEC1: "[1:5,0:2]" starts at y = 0, but sections count from 1.'],
    ["[5:4,1:2]", 'DATASEC1: "[5:4,1:2]" runs backwards in x; write it from low to high.'],
    ["[1:41,1:2]", 'DATASEC1: "[1:41,1:2]" ends at x = 41, but the image ends at 40; correct it.'],
    ["[1:40,1:31]", 'DATASEC1: "[1:40,1:31]" ends at y = 31, but the image ends at 30; correct it.'],
  ])("%s is refused", (text, sentence) => {
    expect(() => parseSection(text, "DATASEC1", 40, 30)).toThrow(new RangeError(sentence));
  });
});
