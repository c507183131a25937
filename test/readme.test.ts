/** README.md stays true: its blocks marked "run" are run as they stand. The commands find a small night in the place of the
 * demo's, with frames of the same names; the library example runs on the scene it names. */
import { spawnSync } from "node:child_process";
import { mkdirSync, mkdtempSync, readFileSync, rmSync, writeFileSync } from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { fileURLToPath } from "node:url";
import { afterAll, beforeAll, describe, expect, test } from "vitest";
import { hatchel, SMALL_SCENE } from "./commands/spawned.js";

const root = fileURLToPath(new URL("..", import.meta.url));
const readme = readFileSync(join(root, "README.md"), "utf8");
const manifest = JSON.parse(readFileSync(join(root, "package.json"), "utf8"));

/** What the demo's night has beyond the small one. */
const MORE = `[[exposure]]
name = "dflat_01"
kind = "detector-flat"
seconds = 15
[[exposure]]
name = "dflat_02"
kind = "detector-flat"
seconds = 15
[[exposure]]
name = "sci_02"
kind = "science"
seconds = 900
shift = 0.05
`;

function blocks(info: string): string[] {
  return readme
    .split(`\n\`\`\`${info}\n`)
    .slice(1)
    .map((rest) => rest.split("```")[0]);
}

/** Command lines without comments, "\" at their ends resolved. */
function commandLines(text: string): string[] {
  const whole = text.replace(/\\\n\s*/g, "");
  return whole.split("\n").filter((line) => line.trim() !== "" && !line.startsWith("#"));
}

describe("the README's commands", () => {
  let folder: string;
  const lines = blocks("sh run").flatMap(commandLines);

  beforeAll(() => {
    folder = mkdtempSync(join(tmpdir(), "hatchel-"));
    mkdirSync(join(folder, "bin"));
    // The command is called as from a checkout.
    writeFileSync(join(folder, "bin/hatchel.js"), `import ${JSON.stringify(join(root, "bin/hatchel.js"))};`);
    writeFileSync(join(folder, "package.json"), '{ "type": "module" }');
    writeFileSync(join(folder, "scene.toml"), SMALL_SCENE + MORE);
    const run = hatchel(["simulate", "scene.toml", "-o", "hatchel-demo", "--quiet"], { cwd: folder });
    if (run.code !== 0) throw new Error(run.stderr);
  });
  afterAll(() => rmSync(folder, { recursive: true }));

  test("are there, and work one after the other", () => {
    expect(lines.map((line) => line.split(" ")[2])).toEqual(["look", "trace", "extract"]);
    for (const line of lines) {
      const run = spawnSync("sh", ["-c", line], { cwd: folder, encoding: "utf8" });
      expect(run.stderr.split("\n").filter((text) => text !== "" && !text.startsWith("assumed: "))).toEqual([]);
      expect(run.status).toBe(0);
    }
  });

  test("write what the README says they write", () => {
    const product = readFileSync(join(folder, "sci_02.fits"), "latin1");
    const names = Array.from(product.matchAll(/EXTNAME = '(\w+) *'/g), ([, name]) => name);
    const said = /writes `sci_02.fits`: images ([^.]*?)\. /.exec(readme.replace(/\s+/g, " "))![1];
    expect(names).toEqual(["PRIMARY", ...Array.from(said.matchAll(/`([A-Z_0-9]{4,})`/g), ([, name]) => name)]);
  });

  test("name every command that there is", () => {
    const help = hatchel(["--help"]).stdout;
    const known = Array.from(help.matchAll(/^ {2}([a-z]+) (?:\[options\] )?[^-]/gm), ([, name]) => name);
    const table = readme.split(/^\| command +\| what it does +\|$/m)[1].split("\n\n")[0];
    const told = Array.from(table.matchAll(/^\| `([a-z]+)/gm), ([, name]) => name);
    expect(told.sort()).toEqual(known.filter((name) => name !== "help").sort());
  });

  test("need scripts that package.json has", () => {
    const called = Array.from(readme.matchAll(/npm (?:run )?(demo|test|accuracy|bench)\b/g), ([, name]) => name);
    expect(new Set(called)).toEqual(new Set(["demo", "test", "accuracy", "bench"]));
    expect(Object.keys(manifest.scripts)).toEqual(expect.arrayContaining([...new Set(called)]));
  });
});

test("the README's library example prints what the README says, flux within a tenth of its error", () => {
  const [example] = blocks("js run");
  const run = spawnSync(process.execPath, ["--input-type=module", "-e", example], { cwd: root, encoding: "utf8" });
  expect(run.stderr).toBe("");
  const said = readme.slice(readme.indexOf(example)).split("```text\n")[1].split("```")[0];
  const flux = /(\d+) ± (\d+) e⁻/;
  const [told, printed] = [flux.exec(said)!, flux.exec(run.stdout)!];
  expect(Math.abs(Number(told[1]) - Number(printed[1]))).toBeLessThan(0.1 * Number(printed[2]));
  expect(Math.abs(Number(told[2]) - Number(printed[2]))).toBeLessThan(0.02 * Number(printed[2]) + 1);
  expect(run.stdout.replace(flux, "")).toBe(said.replace(flux, ""));
});
