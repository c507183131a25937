/** Threads that share a workbench's tiles, over one shared memory.
 *
 * A team starts its threads at once and waits for none: who is not there yet comes late to the work, and the caller, who works
 * too, would do all of it alone. A thread serves one workbench at a time, the one whose tiles were last shared out, and
 * lets go of its memory when it is called to another. Idle threads keep no process alive. */
import { CLOSED, Desk } from "./desk.js";

/** A thread's far end: takes a workbench as a message. */
interface Thread {
  postMessage(message: unknown): void;
}

/** What a team needs to know of a workbench. */
export interface SharedBench {
  readonly memory: WebAssembly.Memory;
  readonly call: object;
}

export class Team {
  private readonly threads: Thread[] = [];
  private desk: Int32Array | undefined;
  private served: WeakRef<SharedBench> | undefined;
  private kernels: string[] = [];

  private modules: readonly WebAssembly.Module[] = [];

  private constructor(
    /** The caller included. */
    readonly nThread: number,
  ) {}

  /** `nThread` threads, the caller included; they start while `modules` compile: the kernels, built for shared memory. */
  static async start(modules: Promise<readonly WebAssembly.Module[]>, nThread: number): Promise<Team> {
    const team = new Team(nThread);
    const { Worker } = await import("node:worker_threads");
    for (let i = 1; i < nThread; i++) {
      const thread = new Worker(new URL("./worker.js", import.meta.url));
      thread.unref();
      // Whatever befalls a thread, the caller does its tiles; but a tile that fails is told by the desk.
      thread.on("error", () => {});
      team.threads.push(thread);
    }
    team.modules = await modules;
    return team;
  }

  /** As `Workbench.share`. @throws Error when a kernel stops in any thread. */
  share(bench: SharedBench, kernel: string, jobs: readonly number[], nTile: number, first: number): void {
    const desk = this.serve(bench);
    desk.set(jobs.slice(0, this.nThread), Desk.jobs);
    desk[Desk.kernel] = this.kernels.indexOf(kernel);
    desk[Desk.end] = first + nTile;
    desk[Desk.failed] = 0;
    Atomics.store(desk, Desk.next, first);
    Atomics.store(desk, Desk.open, 1);
    Atomics.store(desk, Desk.turn, (Atomics.load(desk, Desk.turn) + 1) & 0x3fffffff);
    Atomics.notify(desk, Desk.turn);
    const run = (bench.call as Record<string, (job: number, tile: number) => void>)[kernel];
    try {
      for (let tile = Atomics.add(desk, Desk.next, 1); tile < first + nTile; tile = Atomics.add(desk, Desk.next, 1)) {
        run(jobs[0], tile);
      }
    } finally {
      Atomics.store(desk, Desk.next, first + nTile);
      Atomics.store(desk, Desk.open, 0);
      awaitNobody(desk);
    }
    if (desk[Desk.failed] !== 0)
      throw new Error("A kernel stopped in another thread; this is a defect of the program.");
  }

  /** Has the other threads touch the pages from byte `first` to byte `end` of a memory while the caller goes on; nobody waits for it. */
  touchAhead(memory: WebAssembly.Memory, first: number, end: number): void {
    const { threads } = this;
    if (threads.length === 0) return;
    this.closeDesk();
    const share = Math.ceil((end - first) / threads.length);
    threads.forEach((thread, i) => {
      thread.postMessage({ memory, touch: [first + i * share, Math.min(end, first + (i + 1) * share)] });
    });
  }

  /** Threads leave the desk they wait at, and hear messages again. */
  private closeDesk(): void {
    if (this.desk === undefined) return;
    Atomics.store(this.desk, Desk.turn, CLOSED);
    Atomics.notify(this.desk, Desk.turn);
    this.desk = undefined;
  }

  /** The desk of `bench`, with the threads called to it. */
  private serve(bench: SharedBench): Int32Array {
    if (this.desk !== undefined && this.served?.deref() === bench) return this.desk;
    this.closeDesk();
    const desk = new Int32Array(new SharedArrayBuffer(4 * (Desk.jobs + this.nThread)));
    this.kernels = Object.keys(bench.call);
    this.served = new WeakRef(bench);
    this.desk = desk;
    this.threads.forEach((thread, i) => {
      const { modules, kernels } = this;
      thread.postMessage({ modules, memory: bench.memory, desk, kernels, thread: i + 1 });
    });
    return desk;
  }
}

/** Returns when no thread is at work. */
function awaitNobody(desk: Int32Array): void {
  for (let n = Atomics.load(desk, Desk.atWork); n !== 0; n = Atomics.load(desk, Desk.atWork)) {
    Atomics.wait(desk, Desk.atWork, n);
  }
}
