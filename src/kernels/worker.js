/** A thread that helps with a workbench's tiles. Plain JavaScript, since it is found by its file's name in src/ as in dist/.
 *
 * A message brings a memory, the modules and the memory's desk (see team.ts); the thread then waits at the desk for work,
 * deaf to other messages, until the desk is closed. Another kind of message names pages to touch. */
import { parentPort } from "node:worker_threads";
import { CLOSED, Desk } from "./desk.js";

/** Of memory, in bytes: as small as they come. */
const PAGE_BYTES = 4096;

parentPort?.on("message", ({ modules, memory, desk, kernels, thread, touch }) => {
  if (touch !== undefined) return touchPages(memory, touch);
  const abort = () => {
    throw new Error("A kernel stopped at an impossible state.");
  };
  const exports = modules.map((module) => new WebAssembly.Instance(module, { env: { memory, abort } }).exports);
  const call = Object.assign({}, ...exports);
  serve(desk, (kernel, job, tile) => call[kernels[kernel]](job, tile), thread);
});

/** Nothing is changed, whatever others write there meanwhile.
 * @param {WebAssembly.Memory} memory
 * @param {[first: number, end: number]} range bytes
 */
function touchPages(memory, [first, end]) {
  const words = new Int32Array(memory.buffer);
  for (let at = first; at < end; at += PAGE_BYTES) Atomics.or(words, at >> 2, 0);
}

/**
 * @param {Int32Array} desk
 * @param {(kernel: number, job: number, tile: number) => void} run
 * @param {number} thread
 */
function serve(desk, run, thread) {
  let seen = 0;
  for (;;) {
    Atomics.wait(desk, Desk.turn, seen);
    seen = Atomics.load(desk, Desk.turn);
    if (seen === CLOSED) return;
    Atomics.add(desk, Desk.atWork, 1);
    // Only now: whoever counts nobody at work after closing the turn may change what lies on the desk.
    if (Atomics.load(desk, Desk.open) === 1) {
      try {
        takeTiles(desk, run, thread);
      } catch {
        Atomics.store(desk, Desk.failed, 1);
      }
    }
    Atomics.sub(desk, Desk.atWork, 1);
    Atomics.notify(desk, Desk.atWork);
  }
}

/**
 * @param {Int32Array} desk
 * @param {(kernel: number, job: number, tile: number) => void} run
 * @param {number} thread
 */
function takeTiles(desk, run, thread) {
  const kernel = desk[Desk.kernel];
  const job = desk[Desk.jobs + thread];
  const end = desk[Desk.end];
  for (let tile = Atomics.add(desk, Desk.next, 1); tile < end; tile = Atomics.add(desk, Desk.next, 1)) {
    run(kernel, job, tile);
  }
}
