// Modules, and the scripts of their threads, are found beside the file that loads them, in src/ as in dist/.
import { copyFileSync } from "node:fs";

const modules = ["hatchel", "hatchel.tracing"].flatMap((name) => [`${name}.wasm`, `${name}.shared.wasm`]);
for (const name of [...modules, "worker.js", "desk.js"]) {
  copyFileSync(new URL(`../src/kernels/${name}`, import.meta.url), new URL(`../dist/kernels/${name}`, import.meta.url));
}
