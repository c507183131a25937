/** The door to the WebAssembly kernels: two compiled modules, and one memory for each job.
 *
 *     0 … heapBase()             the compiler's own tables
 *     heapBase() … end           what a Workbench hands out, in order, each piece on a 64-byte boundary
 *
 * A Workbench is sized once and never grows, so its views stay valid for its whole life; it is released
 * with the last reference to it. */
import type { KernelExports, TileKernel } from "./exports.js";
import type { Team } from "./team.js";

const PAGE_BYTES = 65536;
const MOST_PAGES = 65536;
/** Threads that scratch is laid out for at the most. */
export const mostThreads = 16;
const ALIGN_BYTES = 64;
/** Less is touched sooner than told. */
const FEW_BYTES = 2 ** 20;

/** The compiled kernels. Cheap to keep; hold a Workbench only as long as its job lasts. */
export class Kernels {
  private readonly heapBase: number;

  /** `modules`: for extraction, and for tracing, whose tables lie behind the other's. `team`: threads, when they are built for
   * shared memory. */
  constructor(
    private readonly modules: readonly [WebAssembly.Module, WebAssembly.Module],
    private readonly team?: Team,
  ) {
    this.heapBase = instantiate(modules, this.memory(1)).heapBase();
  }

  /** Threads of every workbench. */
  get nThread(): number {
    return this.team?.nThread ?? 1;
  }

  /** A fresh memory with room for `nBytes` handed out in at most `nPieces` pieces.
   * @throws RangeError when the engine cannot give that much (WebAssembly addresses 4 GiB at the most). */
  workbench(nBytes: number, nPieces = 64): Workbench {
    const total = this.heapBase + nBytes + (nPieces + 1) * ALIGN_BYTES;
    const pages = Math.ceil(total / PAGE_BYTES);
    if (pages > MOST_PAGES)
      throw new RangeError(`The job needs ${gib(total)} GiB of kernel memory; 4 GiB is the limit.`);
    const memory = this.memory(pages);
    return new Workbench(instantiate(this.modules, memory), memory, this.heapBase, this.team);
  }

  private memory(pages: number): WebAssembly.Memory {
    if (this.team === undefined) return new WebAssembly.Memory({ initial: pages });
    return new WebAssembly.Memory({ initial: pages, maximum: MOST_PAGES, shared: true });
  }
}

/** One job's memory: typed views into it, whose `byteOffset` is the pointer that a kernel takes. */
export class Workbench {
  private next: number;
  private lent = false;

  constructor(
    readonly call: KernelExports,
    readonly memory: WebAssembly.Memory,
    heapBase: number,
    private readonly team?: Team,
  ) {
    this.next = heapBase;
  }

  /** Threads that `share` hands tiles to. */
  get nThread(): number {
    return this.team?.nThread ?? 1;
  }

  /** Runs `kernel(job, tile)` for `nTile` tiles from number `first` on, each once and in no certain order, and returns when
   * all are done. `jobs`: a pointer for each of the `nThread` threads, each with scratch of its own; tiles write to places
   * of their own, so that the outcome does not depend on who ran which. */
  share(kernel: TileKernel, jobs: readonly number[], nTile: number, first = 0): void {
    if (this.team !== undefined && nTile > 1) this.team.share(this, kernel, jobs, nTile, first);
    else for (let tile = first; tile < first + nTile; tile++) this.call[kernel](jobs[0], tile);
  }

  float32(n: number): Float32Array<ArrayBuffer> {
    return new Float32Array(this.buffer, this.reserve(4 * n), n);
  }

  float64(n: number): Float64Array<ArrayBuffer> {
    return new Float64Array(this.buffer, this.reserve(8 * n), n);
  }

  int32(n: number): Int32Array<ArrayBuffer> {
    return new Int32Array(this.buffer, this.reserve(4 * n), n);
  }

  uint8(n: number): Uint8Array<ArrayBuffer> {
    return new Uint8Array(this.buffer, this.reserve(n), n);
  }

  /** Has other threads touch the pages of these bytes, which will be written to, while the caller goes on: on some machines the
   * first touch of a page takes longer than all that is done to it. Without other threads nothing happens. */
  touchAhead(byteOffset: number, nBytes: number): void {
    if (nBytes >= FEW_BYTES) this.team?.touchAhead(this.memory, byteOffset, byteOffset + nBytes);
  }

  /** Lends what is behind `last` to one who keeps results there; false when it is lent already. */
  lend(last: ArrayBufferView): boolean {
    if (this.lent) return false;
    this.keepUpTo(last);
    this.lent = true;
    return true;
  }

  /** What was lent is free again. */
  giveBack(): void {
    this.lent = false;
  }

  /** Forgets the pieces behind `last`: their places are handed out anew. */
  keepUpTo(last: ArrayBufferView): void {
    this.next = last.byteOffset + last.byteLength;
  }

  /** TypeScript tells shared buffers from others; what is done with these views is right for both, but for the few things that
   * refuse shared ones (TextDecoder, for one). */
  private get buffer(): ArrayBuffer {
    return this.memory.buffer as ArrayBuffer;
  }

  private reserve(nBytes: number): number {
    const at = Math.ceil(this.next / ALIGN_BYTES) * ALIGN_BYTES;
    if (at + nBytes > this.memory.buffer.byteLength) {
      throw new RangeError(`Workbench of ${this.memory.buffer.byteLength} bytes has no room for ${nBytes} more.`);
    }
    this.next = at + nBytes;
    return at;
  }
}

let loading: Promise<Kernels> | undefined;
let threads = 1;

/** How many threads kernels take from here on; 1, the default, until this is called. Where shared memory is not allowed they
 * stay one. Results do not depend on it, to the last bit.
 * @throws RangeError for less than one. */
export function useThreads(nThread: number): void {
  if (!Number.isInteger(nThread) || nThread < 1 || nThread > mostThreads) {
    throw new RangeError(`${nThread} threads; 1 to ${mostThreads} are possible.`);
  }
  if (nThread === threads) return;
  threads = nThread;
  loading = undefined;
}

/** Loads the kernels when first asked for and keeps them.
 * `extraction`, `tracing`: where the two modules lie (default: beside this file), or their bytes; they run on one thread then.
 * @throws Error when what is found there is not a WebAssembly module. */
export function loadKernels(extraction?: URL | Uint8Array, tracing?: URL | Uint8Array): Promise<Kernels> {
  if (extraction !== undefined || tracing !== undefined) return loadAlone(extraction, tracing);
  loading ??= threads > 1 && maySharedMemory() ? loadShared(threads) : loadAlone();
  return loading;
}

async function loadAlone(
  extraction: URL | Uint8Array = new URL("./hatchel.wasm", import.meta.url),
  tracing: URL | Uint8Array = new URL("./hatchel.tracing.wasm", import.meta.url),
): Promise<Kernels> {
  return new Kernels(await Promise.all([compile(extraction), compile(tracing)]));
}

async function loadShared(nThread: number): Promise<Kernels> {
  const compiling = Promise.all([
    compile(new URL("./hatchel.shared.wasm", import.meta.url)),
    compile(new URL("./hatchel.tracing.shared.wasm", import.meta.url)),
  ]);
  const { Team } = await import("./team.js");
  const team = await Team.start(compiling, nThread);
  return new Kernels(await compiling, team);
}

/** Node has shared memory and threads; a page only when it is isolated from other origins, and there is no door for it yet. */
function maySharedMemory(): boolean {
  return typeof SharedArrayBuffer !== "undefined" && typeof process !== "undefined" && !!process.versions?.node;
}

async function compile(source: URL | Uint8Array): Promise<WebAssembly.Module> {
  const bytes = source instanceof Uint8Array ? source : await fetchBytes(source);
  const magic = [0x00, 0x61, 0x73, 0x6d];
  if (magic.some((byte, i) => bytes[i] !== byte)) {
    const found = [...bytes.subarray(0, 4)].map((b) => b.toString(16).padStart(2, "0")).join(" ") || "nothing";
    const where = source instanceof Uint8Array ? "the bytes given" : source.pathname;
    throw new Error(`${where}: starts with ${found}, but a WebAssembly module starts with 00 61 73 6d; rebuild it.`);
  }
  return WebAssembly.compile(bytes as BufferSource);
}

async function fetchBytes(url: URL): Promise<Uint8Array> {
  if (url.protocol === "file:") {
    const { readFile } = await import("node:fs/promises");
    return readFile(url);
  }
  const response = await fetch(url);
  if (!response.ok) throw new Error(`${url.href}: HTTP status ${response.status} instead of the kernel module.`);
  return new Uint8Array(await response.arrayBuffer());
}

function instantiate(modules: readonly WebAssembly.Module[], memory: WebAssembly.Memory): KernelExports {
  const abort = () => {
    throw new Error("A kernel stopped at an impossible state; this is a defect of the program, not of the data.");
  };
  // heapBase is the last module's, behind all tables.
  const exports = modules.map((module) => new WebAssembly.Instance(module, { env: { memory, abort } }).exports);
  return Object.assign({}, ...exports) as KernelExports;
}

function gib(nBytes: number): string {
  return (nBytes / 2 ** 30).toFixed(1);
}
