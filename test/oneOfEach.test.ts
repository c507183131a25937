/** Sentences of many frames, for people. */
import { expect, test } from "vitest";
import { oneOfEach } from "../src/oneOfEach.js";

test("the same words of several frames are said once, with their names", () => {
  expect(oneOfEach(["a.fits: no gain.", "b.fits: no gain.", "a.fits: no gain.", "a.fits: no dark."])).toEqual([
    "a.fits, b.fits: no gain.",
    "a.fits: no dark.",
  ]);
});

test("many names are counted, and what names nobody is said once", () => {
  const frames = ["1", "2", "3", "4", "5"].map((name) => `${name}.fits: no gain.`);
  expect(oneOfEach([...frames, "No arc.", "No arc."])).toEqual(["1.fits, 2.fits, 3.fits, 2 more: no gain.", "No arc."]);
});
