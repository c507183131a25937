/** Frames that an observer would look at again. */
import { expect, test } from "vitest";
import { frameVerdict } from "../../src/night/verdict.js";

const facts = (more: object = {}) => ({
  ...{ frame: "s1.fits", usableShare: 0.99, shiftPixels: 0.1, medianElectrons: 900, exposureSeconds: 900 },
  ...more,
});
const verdict = (more: object, others: object[] = []) =>
  frameVerdict(facts(more), [facts(more), ...others.map((one) => facts({ frame: "s2.fits", ...one }))]);

test("a frame without a fault is good", () => {
  expect(verdict({}, [{ medianElectrons: 1000 }])).toEqual({ verdict: "good", reasons: [] });
});

test.each([
  ["few points that can be trusted", { usableShare: 0.4 }, "bad", /^only 40 % of its points/],
  ["fewer than usual", { usableShare: 0.8 }, "doubtful", /^only 80 % of its points/],
  ["a shift of over a pixel", { shiftPixels: -1.2 }, "doubtful", /^its light lies -1\.20 px from the flat's/],
  ["a zero point of over a pixel", { zeroPointPixels: 1.4 }, "doubtful", /^its lines lie 1\.40 px from the arc's/],
  ["sky lines that are left", { skyPullAtLines: 2.2 }, "doubtful", /^the sky's lines are left with 2\.2 times/],
  ["no measurable shift", { shiftPixels: null }, "doubtful", /^too little light to measure its shift/],
])("%s", (_what, more, grade, reason) => {
  const judged = verdict(more);
  expect(judged.verdict).toBe(grade);
  expect(judged.reasons).toEqual([expect.stringMatching(reason)]);
});

test("light is compared a second, within the field", () => {
  // 400 e⁻ in 900 s against 400 e⁻ in 300 s: a third.
  const judged = verdict({ medianElectrons: 400 }, [{ medianElectrons: 400, exposureSeconds: 300 }]);
  expect(judged).toEqual({
    verdict: "doubtful",
    reasons: [expect.stringMatching(/^33 % of the light per second of s2\.fits: clouds/)],
  });
  expect(verdict({ medianElectrons: 400 }, [{ medianElectrons: 250, exposureSeconds: 300 }]).verdict).toBe("good");
  expect(verdict({ exposureSeconds: null }, [{}]).verdict).toBe("good");
});
