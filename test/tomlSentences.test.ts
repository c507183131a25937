/** What is said about TOML that cannot be used; the spectrograph file's and the night plan's tests say more. */
import { expect, test } from "vitest";
import { z } from "zod";
import { tomlComplaint, tomlTree } from "../src/tomlSentences.js";

const schema = z.strictObject({
  size: z.number().optional(),
  part: z.array(z.strictObject({ name: z.string(), weight: z.number().optional() })).optional(),
});
const KEYS = {
  "": { size: "a number", part: "one or more [[part]] tables" },
  part: { name: "a string", weight: "a number of kg" },
};

test.each([
  ["sise = 1", "f.toml: unknown key 'sise'; did you mean 'size'?"],
  ["colour = 1", "f.toml: unknown key 'colour'; known there: size, part."],
  ["size = 'x'", "f.toml: 'size' is \"x\", but a number was expected; correct it or leave the key out."],
  ["part = 3", "f.toml: 'part' is 3, but one or more [[part]] tables was expected; correct it or leave the key out."],
  ["[[part]]\nname = 'a'\n[[part]]\nweight = 2", "f.toml: 'part[2].name' is missing; add a string."],
  ["[[part]]\nname = 'a'\nweigth = 2", "f.toml: unknown key 'part[1].weigth'; did you mean 'weight'?"],
])("%j", (text, sentence) => {
  const parsed = tomlTree(text, "f.toml");
  if (!("tree" in parsed)) throw new Error(parsed.complaint);
  const result = schema.safeParse(parsed.tree);
  expect(tomlComplaint("f.toml", parsed.tree, result.error!.issues[0], KEYS)).toBe(sentence);
});

test("a broken line is named", () => {
  expect(tomlTree("a = 1\nb = = 2", "f.toml")).toEqual({
    complaint: expect.stringMatching(/^f\.toml, line 2: not valid TOML \(.+\); correct that line\.$/),
  });
});
