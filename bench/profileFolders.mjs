// Where a command's time goes: Node's own sampling of the stack, summed over the folders of dist/.
import { spawnSync } from "node:child_process";
import { mkdtempSync, readdirSync, readFileSync, rmSync } from "node:fs";
import { join } from "node:path";

const folders = ["fits", "detector", "tramlines", "extraction", "kernels"];
const wasm = "WebAssembly";
const rest = "Node and the rest";

/** Shares of the main thread's time: one for each folder, WebAssembly, and the rest; sum 1.
 * @param {string[]} args what Node is to run @param {string} place where the samples may lie meanwhile */
export function folderTimes(args, place) {
  const folder = mkdtempSync(join(place, "samples-"));
  try {
    const run = spawnSync(process.execPath, ["--cpu-prof", "--cpu-prof-dir", folder, ...args], { encoding: "utf8" });
    if (run.status !== 0) throw new Error(`${args[1]} failed: ${run.stderr}`);
    return sharesOf(JSON.parse(readFileSync(join(folder, mainThread(folder)), "utf8")));
  } finally {
    rmSync(folder, { recursive: true });
  }
}

/** CPU.date.time.pid.thread.number.cpuprofile: the main thread is 0. */
function mainThread(folder) {
  return readdirSync(folder).find((name) => name.split(".")[4] === "0") ?? readdirSync(folder)[0];
}

function sharesOf({ nodes, samples, timeDeltas }) {
  const byId = new Map(nodes.map((node) => [node.id, node]));
  const parent = new Map(nodes.flatMap((node) => (node.children ?? []).map((child) => [child, node.id])));
  const taken = new Map([...folders, wasm, rest].map((name) => [name, 0]));
  const owners = new Map();
  const ownerOf = (id) => {
    if (id === undefined) return rest;
    if (!owners.has(id)) owners.set(id, own(byId.get(id).callFrame.url) ?? ownerOf(parent.get(id)));
    return owners.get(id);
  };
  let total = 0;
  samples.forEach((id, i) => {
    const owner = ownerOf(id);
    taken.set(owner, taken.get(owner) + timeDeltas[i]);
    total += timeDeltas[i];
  });
  return [...taken].map(([name, time]) => ({ name, share: time / total }));
}

function own(url) {
  if (url.startsWith("wasm:")) return wasm;
  return folders.find((name) => url.includes(`/dist/${name}/`));
}
