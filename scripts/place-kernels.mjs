// The module is found beside the file that loads it, in src/ as in dist/.
import { copyFileSync } from "node:fs";

copyFileSync(
  new URL("../src/kernels/hatchel.wasm", import.meta.url),
  new URL("../dist/kernels/hatchel.wasm", import.meta.url),
);
