/** The list of commands is written apart from the commands, so that it can be shown without them: the two must agree. */
import { Command } from "commander";
import { expect, test } from "vitest";
import { contents } from "../../src/commands/contents.js";
import { jsonSchemas } from "../../src/commands/json.js";

test.each(contents)("$name takes what the list says", async ({ name, takes, define }) => {
  const command = new Command(name);
  await define(command);
  expect(command.usage()).toBe(`[options] ${takes}`.trimEnd());
  expect(command.description()).not.toBe("");
});

test("every command has an object for --json, and no other has", () => {
  const described = Object.keys(jsonSchemas).filter((name) => name !== "failure");
  expect(contents.map(({ name }) => name).sort()).toEqual(described.sort());
});
