// The command in a few files, dist/command/, beside the library's many in dist/: Node spends more time on finding two hundred
// modules than on a small job. A command is loaded when it is asked for, and a package when it is needed.
//
// The door to the kernels stays outside: it finds them beside itself.
import { readFileSync, rmSync } from "node:fs";
import { dirname, join } from "node:path";
import { fileURLToPath } from "node:url";
import { rolldown } from "rolldown";

const root = fileURLToPath(new URL("..", import.meta.url));
const folder = join(root, "dist", "command");
const door = join(root, "dist", "kernels", "module.js");
/** Those that jobs begin with; the others are found as packages. */
const TAKEN_IN = ["commander", "smol-toml", "zod"];

/** The command, and the script of the threads that `hatchel run` has. */
const ENTRIES = ["main", "nightWorker"];

rmSync(folder, { recursive: true, force: true });
const bundle = await rolldown({
  input: Object.fromEntries(ENTRIES.map((name) => [name, join(root, "dist", "commands", `${name}.js`)])),
  platform: "node",
  external: (id, importer) =>
    id.startsWith(".") ? join(dirname(importer), id) === door : /^[a-z@]/.test(id) && !TAKEN_IN.includes(id),
  treeshake: { moduleSideEffects: ENTRIES.map((name) => join(root, "dist", "commands", `${name}.js`)) },
});
await bundle.write({
  dir: folder,
  format: "esm",
  entryFileNames: "[name].js",
  chunkFileNames: "[name].js",
  codeSplitting: {
    groups: TAKEN_IN.map((name) => ({ name, test: new RegExp(`node_modules/${name}/`) })),
  },
  // What a copy of another's work has to say.
  banner: ({ name }) => (TAKEN_IN.includes(name) ? `/*!\n${read("node_modules", name, "LICENSE")}\n*/` : ""),
});
await bundle.close();

function read(...path) {
  return readFileSync(join(root, ...path), "utf8").trim();
}
