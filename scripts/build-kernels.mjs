// The kernels, two modules, each for a memory of one thread and for one that threads share; and with names and checks for a
// debugger. A module that grows beyond its size stops the build.
import { execFileSync } from "node:child_process";
import { statSync } from "node:fs";
import { createRequire } from "node:module";
import { join } from "node:path";
import { fileURLToPath } from "node:url";

const root = fileURLToPath(new URL("..", import.meta.url));
const asc = join(createRequire(import.meta.url).resolve("assemblyscript/package.json"), "..", "bin", "asc.js");
const largestBytes = 60_000;
/** Where the second module's tables begin; the first one's end below. */
const tracingBase = "16384";

const modules = [
  { name: "hatchel", entry: "assembly/index.ts", options: [] },
  { name: "hatchel.tracing", entry: "assembly/tracing.ts", options: ["--memoryBase", tracingBase] },
];
for (const { name, entry, options } of modules) {
  for (const [target, file] of [
    ["release", `src/kernels/${name}.wasm`],
    ["shared", `src/kernels/${name}.shared.wasm`],
    ["debug", `build/${name}.debug.wasm`],
  ]) {
    execFileSync(process.execPath, [asc, entry, "--target", target, "--outFile", file, ...options], {
      cwd: root,
      stdio: "inherit",
    });
    const { size } = statSync(join(root, file));
    if (target !== "debug" && size > largestBytes) {
      throw new Error(`${file} takes ${size} bytes; keep it within ${largestBytes}.`);
    }
  }
}
