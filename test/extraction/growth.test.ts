import { describe, expect, it } from "vitest";
import { growRejected } from "../../src/extraction/growth.js";
import { MaskBit } from "../../src/reference/bits.js";

const nx = 7;
const ny = 5;

/** "c" rejected, "s" suspect, "b" both, "." neither. */
function image(rows: string[]): Uint8Array {
  const bits: Record<string, number> = {
    c: MaskBit.cosmic,
    s: MaskBit.suspect,
    b: MaskBit.cosmic | MaskBit.suspect,
    ".": 0,
  };
  return Uint8Array.from(rows.join(""), (letter) => bits[letter]);
}

function grownOf(rejected: Uint8Array): string[] {
  return Array.from({ length: ny }, (_, y) =>
    Array.from(rejected.subarray(y * nx, (y + 1) * nx), (bits) => (bits & MaskBit.grown ? "g" : ".")).join(""),
  );
}

describe("growth of rejections", () => {
  it("takes suspects that border on a rejected pixel, corners included, and nothing else", () => {
    const rejected = image([
      "s.....s", //
      ".c...s.",
      "s.s.s..",
      "...s...",
      "s.....b",
    ]);
    const changed = growRejected(rejected, nx, ny);
    expect(grownOf(rejected)).toEqual([
      "g......", //
      ".......",
      "g.g....",
      ".......",
      ".......",
    ]);
    expect([...changed]).toEqual([1, 0, 1, 0, 0, 0, 0]);
  });

  it("goes one pixel and no further: a suspect beside a grown one stays", () => {
    const rejected = image(["csss...", ".......", ".......", ".......", "...sssc"]);
    growRejected(rejected, nx, ny);
    expect(grownOf(rejected)).toEqual([".g.....", ".......", ".......", ".......", ".....g."]);
  });

  it("does not reach around the frame's edges", () => {
    const rejected = image(["......c", "s......", ".......", "......s", "c......"]);
    const changed = growRejected(rejected, nx, ny);
    expect(grownOf(rejected).join("")).not.toContain("g");
    expect(changed.includes(1)).toBe(false);
  });

  it("keeps the bits that were there", () => {
    const rejected = image(["bs.....", ".......", ".......", ".......", "......."]);
    growRejected(rejected, nx, ny);
    expect(rejected[0]).toBe(MaskBit.cosmic | MaskBit.suspect);
    expect(rejected[1]).toBe(MaskBit.suspect | MaskBit.grown);
  });
});
