/** The packed tarball, installed in an empty folder without development packages, as a stranger would have it. `npm test` builds
 * before it runs; the packages it needs come from npm's cache or the registry. */
import { spawnSync } from "node:child_process";
import { copyFileSync, mkdtempSync, readdirSync, readFileSync, rmSync, writeFileSync } from "node:fs";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { fileURLToPath } from "node:url";
import { afterAll, beforeAll, describe, expect, test } from "vitest";
import { SMALL_SCENE } from "./commands/spawned.js";

const root = fileURLToPath(new URL("..", import.meta.url));
const manifest = JSON.parse(readFileSync(join(root, "package.json"), "utf8"));
let folder: string;
let packed: string[];

beforeAll(() => {
  folder = mkdtempSync(join(tmpdir(), "hatchel-package-"));
  // Without scripts: what is packed is what the tests run on.
  const [{ filename, files }] = JSON.parse(
    npm(["pack", "--ignore-scripts", "--json", "--pack-destination", folder], root),
  );
  packed = files.map(({ path }: { path: string }) => path);
  writeFileSync(join(folder, "package.json"), '{ "private": true, "type": "module" }');
  npm(["install", "--omit=dev", "--prefer-offline", "--no-audit", "--no-fund", `./${filename}`], folder);
}, 240_000);
afterAll(() => rmSync(folder, { recursive: true }));

function npm(args: string[], cwd: string): string {
  // An npm that runs this test hands down its settings, its prefix among them.
  const env = Object.fromEntries(Object.entries(process.env).filter(([name]) => !/^npm_/i.test(name)));
  return run("npm", args, cwd, env);
}

function run(command: string, args: string[], cwd = folder, env: NodeJS.ProcessEnv = process.env): string {
  const ended = spawnSync(command, args, { cwd, env, encoding: "utf8", maxBuffer: 1 << 26 });
  if (ended.error) throw ended.error;
  if (ended.status !== 0) throw new Error(`${command} ${args.join(" ")} failed: ${ended.stderr}`);
  return ended.stdout;
}

/** What an ES module in that folder prints. */
function printed(script: string): string {
  return run(process.execPath, ["--input-type=module", "-e", script]).trim();
}

describe("the packed tarball", () => {
  test("holds the built library, the command, README and LICENSE, and nothing else", () => {
    const outside = packed.filter((path) => !path.startsWith("dist/"));
    expect(outside.sort()).toEqual(["LICENSE", "README.md", "bin/hatchel.js", "package.json"]);
    // Both modules, each for one thread and for several, and what a thread runs.
    for (const name of ["hatchel.wasm", "hatchel.shared.wasm", "hatchel.tracing.wasm", "hatchel.tracing.shared.wasm"]) {
      expect(packed).toContain(`dist/kernels/${name}`);
    }
    for (const name of ["worker.js", "desk.js"]) expect(packed).toContain(`dist/kernels/${name}`);
    expect(packed.filter((path) => !/\.(js|d\.ts|wasm)$/.test(path) && path.startsWith("dist/"))).toEqual([]);
  });

  test("brings the packages that it names, none of the development ones", () => {
    const installed = readdirSync(join(folder, "node_modules"));
    expect(installed).toEqual(expect.arrayContaining(Object.keys(manifest.dependencies)));
    for (const name of ["typescript", "vitest", "assemblyscript"]) expect(installed).not.toContain(name);
  });

  test("gives a command that tells its version", () => {
    expect(run(join(folder, "node_modules/.bin/hatchel"), ["--version"])).toBe(`${manifest.version}\n`);
  });

  test("gives a library that finds its kernels, and their file by a name of its own", () => {
    const library = `const { loadKernels } = await import("hatchel");
      const { call } = (await loadKernels()).workbench(0); console.log(call.erf(0.5));`;
    // Abramowitz & Stegun, table 7.1: erf(0.5) = 0.5204998778.
    expect(Math.abs(Number(printed(library)) - 0.5204998778)).toBeLessThan(5e-11);
    const file = `import fs from "node:fs"; const file = new URL(import.meta.resolve("hatchel/hatchel.wasm"));
      console.log(WebAssembly.validate(fs.readFileSync(file)), fs.readFileSync(file).subarray(1, 4).toString());`;
    expect(printed(file)).toBe("true asm");
  });

  test("has types for every export that a compiler looks for first", () => {
    for (const entry of Object.values<string | Record<string, string>>(manifest.exports)) {
      const paths = typeof entry === "string" ? [entry] : Object.values(entry);
      for (const path of paths) expect(packed).toContain(path.replace(/^\.\//, ""));
    }
    expect(Object.keys(manifest.exports["."])[0]).toBe("types");
  });

  test("does the whole job", () => {
    writeFileSync(join(folder, "scene.toml"), SMALL_SCENE);
    const hatchel = (...args: string[]) => run(join(folder, "node_modules/.bin/hatchel"), args);
    hatchel("simulate", "scene.toml", "-o", "night", "--quiet");
    const raw = (name: string) => `night/raw/${name}.fits`;
    const given = ["--spectrograph", "night/spectrograph.toml", "--flat", raw("fflat_01"), raw("fflat_02"), "--json"];
    const json = JSON.parse(hatchel("extract", raw("sci_01"), "-o", "spectra.fits", ...given));
    expect(json).toMatchObject({ hatchel: manifest.version, command: "extract", fibres: { positions: 19, lit: 18 } });
    expect(json.usablePoints / json.points).toBeGreaterThan(0.95);
  });
});

test("package-lock.json holds all that npm ci asks for on a fresh machine", () => {
  const empty = mkdtempSync(join(tmpdir(), "hatchel-lock-"));
  for (const name of ["package.json", "package-lock.json"]) copyFileSync(join(root, name), join(empty, name));
  const told = npm(["ci", "--dry-run", "--ignore-scripts", "--no-audit", "--no-fund"], empty);
  rmSync(empty, { recursive: true });
  expect(told).toMatch(/added \d+ packages/);
});

test("package-lock.json names no registry, so that any can serve it", () => {
  const lock = JSON.parse(readFileSync(join(root, "package-lock.json"), "utf8"));
  const from = Object.values<{ resolved?: string }>(lock.packages).flatMap(({ resolved }) => resolved ?? []);
  expect(from).toEqual([]);
  expect(Object.keys(lock.packages[""].dependencies)).toEqual(Object.keys(manifest.dependencies));
  expect(Object.keys(lock.packages[""].devDependencies)).toEqual(Object.keys(manifest.devDependencies));
});
