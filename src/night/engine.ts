/** Carries tasks out in the order that they need, several at once: each when all that it reads is there. What was made
 * before under the same key is kept. A task that fails takes along those that read its products, and nothing else. */
import { basename } from "node:path";
import { digestOf, fileDigest } from "./digest.js";
import type { Ledger, TaskRecord } from "./ledger.js";
import type { Facts, Job, Task } from "./task.js";

export type Ending =
  /** Kept: made by an earlier run, and nothing has changed. */
  | { state: "made" | "kept"; record: TaskRecord }
  /** One sentence. */
  | { state: "failed"; reason: string }
  /** Not begun, because of the task called `because`. */
  | { state: "not made"; because: Task; reason: string }
  /** Not begun: the run was to end. */
  | { state: "left" };

export interface EngineOptions {
  ledger: Ledger;
  /** Program's digest: part of every key. */
  program: string;
  /** How many tasks run at once. */
  atOnce: number;
  /** Makes a task's products. @throws Error whose message is one sentence. */
  make: (job: Job) => Promise<Facts>;
  onStart?: (task: Task) => void;
  onEnd?: (task: Task, ending: Ending) => void;
}

export class Engine {
  private readonly tasks = new Map<string, Task>();
  private readonly endings = new Map<string, Ending>();
  private readonly running = new Set<string>();
  private readonly sums = new Map<string, Promise<string>>();
  /** Effort of a task and of the longest way from it to the end. */
  private readonly ahead = new Map<string, number>();
  private idle: (() => void)[] = [];
  private stopping = false;
  private defect: unknown;

  constructor(private readonly options: EngineOptions) {}

  /** Takes tasks on; those that are here already, and have not changed, stay as they are. `renewed`: files that may have
   * changed since they were read.
   * @throws RangeError when one reads products of a task that is not there. */
  add(tasks: readonly Task[], renewed: readonly string[] = []): void {
    for (const path of renewed) this.sums.delete(path);
    const isNew = tasks.filter((task) => {
      const known = this.tasks.get(task.id);
      const same = known !== undefined && JSON.stringify(known) === JSON.stringify(task);
      return !same || Object.values(task.inputs).some((paths) => paths.some((path) => renewed.includes(path)));
    });
    for (const task of isNew) this.tasks.set(task.id, task);
    for (const { id, after, some = [] } of isNew) {
      const missing = [...after, ...some].find((one) => !this.tasks.has(one));
      if (missing !== undefined) throw new RangeError(`Task ${id} reads what ${missing} makes, which is no task.`);
      this.forget(id);
    }
    this.reckonAhead();
    this.advance();
  }

  /** It is to be done again, and what reads its products. */
  private forget(id: string): void {
    this.endings.delete(id);
    for (const { id: other, after, some = [] } of this.tasks.values()) {
      if ((after.includes(id) || some.includes(id)) && this.endings.has(other)) this.forget(other);
    }
  }

  /** Resolves when nothing is left to do, with how each task ended, in the order in which they were added. */
  async settled(): Promise<Map<Task, Ending>> {
    while (this.endings.size < this.tasks.size && this.defect === undefined) {
      await new Promise<void>((resolve) => this.idle.push(resolve));
    }
    if (this.defect !== undefined) throw this.defect;
    return new Map(Array.from(this.tasks.values(), (task) => [task, this.endings.get(task.id)!]));
  }

  /** Begins nothing more; what runs is finished. */
  stop(): void {
    this.stopping = true;
    this.advance();
  }

  private advance(): void {
    const barred = () =>
      this.waiting()
        .map((task) => ({ task, ending: this.barred(task) }))
        .find(({ ending }) => ending !== undefined);
    for (let one = barred(); one !== undefined; one = barred()) this.settle(one.task, one.ending!);
    const ready = this.waiting().filter(
      ({ after, some = [] }) =>
        after.every((id) => this.recordOf(id) !== undefined) && some.every((id) => this.endings.has(id)),
    );
    const order = [...ready].sort((a, b) => this.ahead.get(b.id)! - this.ahead.get(a.id)!);
    for (const task of order.slice(0, Math.max(0, this.options.atOnce - this.running.size))) void this.run(task);
    if (this.running.size === 0 && this.endings.size === this.tasks.size) this.wake();
  }

  private waiting(): Task[] {
    return [...this.tasks.values()].filter(({ id }) => !this.endings.has(id) && !this.running.has(id));
  }

  /** Why a task that waits will never begin. */
  private barred({ after, some = [], least = 1 }: Task): Ending | undefined {
    if (this.stopping) return { state: "left" };
    for (const id of after) {
      const because = this.becauseOf(id);
      if (because !== undefined) return because;
    }
    const lost = some.flatMap((id) => this.becauseOf(id) ?? []);
    return some.length > 0 && some.length - lost.length < least ? lost[0] : undefined;
  }

  /** Why what hangs on a task cannot be made, when that task ended without its products. */
  private becauseOf(id: string): Ending | undefined {
    const ending = this.endings.get(id);
    if (ending?.state === "failed") return { state: "not made", because: this.tasks.get(id)!, reason: ending.reason };
    return ending?.state === "not made" || ending?.state === "left" ? ending : undefined;
  }

  /** The longest way goes first. Tasks come after those whose products they read, so that going backwards is enough. */
  private reckonAhead(): void {
    this.ahead.clear();
    for (const { id, after, some = [], effort } of [...this.tasks.values()].reverse()) {
      const own = effort + (this.ahead.get(id) ?? 0);
      this.ahead.set(id, own);
      for (const one of [...after, ...some]) this.ahead.set(one, Math.max(own, this.ahead.get(one) ?? 0));
    }
  }

  private recordOf(id: string): TaskRecord | undefined {
    const ending = this.endings.get(id);
    return ending?.state === "made" || ending?.state === "kept" ? ending.record : undefined;
  }

  private async run(task: Task): Promise<void> {
    this.running.add(task.id);
    try {
      this.end(task, await this.made(task));
    } catch (error) {
      this.defect = error;
      this.wake();
    }
  }

  private async made(task: Task): Promise<Ending> {
    const { ledger, make, onStart } = this.options;
    try {
      const job = await this.jobOf(task);
      const key = this.keyOf(task, job);
      const kept = await ledger.find(task, key);
      if (kept !== undefined) return { state: "kept", record: kept };
      if (this.stopping) return { state: "left" };
      onStart?.(task);
      const room = ledger.roomFor(task);
      const facts = await make({ ...job, ...room });
      return { state: "made", record: await ledger.accept(task, key, room, facts) };
    } catch (error) {
      return { state: "failed", reason: error instanceof Error ? error.message : String(error) };
    }
  }

  private async jobOf({ stage, inputs, after, some = [], options }: Task): Promise<Job> {
    const entries = Object.entries(inputs).map(async ([role, paths]) => {
      const files = paths.map(async (path) => ({ path, digest: await this.sumOf(path) }));
      return [role, await Promise.all(files)] as const;
    });
    const products = [...after, ...some].flatMap((id) => this.recordOf(id)?.products ?? []);
    const from = products.map(({ name, sha256 }) => [name, { path: this.options.ledger.pathOf(name), digest: sha256 }]);
    return {
      stage,
      inputs: Object.fromEntries(await Promise.all(entries)),
      from: Object.fromEntries(from),
      products: [],
      options,
    };
  }

  /** Names of inputs are part of it, since products keep them in their HISTORY; their folders are not. */
  private keyOf({ stage, products, folder }: Task, { inputs, from, options }: Job): string {
    const named = Object.entries(inputs).map(([role, files]) => [
      role,
      files.map(({ path, digest }) => [basename(path), digest]),
    ]);
    const before = Object.entries(from).map(([name, { digest }]) => [name, digest]);
    return digestOf([this.options.program, stage, products, folder ?? null, options, named, before]);
  }

  private sumOf(path: string): Promise<string> {
    let sum = this.sums.get(path);
    if (sum === undefined) this.sums.set(path, (sum = fileDigest(path)));
    return sum;
  }

  /** What ran has ended. It may have become another task meanwhile, or what it reads may be made anew: then it is done again. */
  private end(task: Task, ending: Ending): void {
    this.running.delete(task.id);
    const reads = [...task.after, ...(task.some ?? [])];
    if (this.tasks.get(task.id) === task && reads.every((id) => this.endings.has(id))) this.settle(task, ending);
    this.advance();
  }

  private settle(task: Task, ending: Ending): void {
    this.endings.set(task.id, ending);
    this.options.onEnd?.(task, ending);
  }

  private wake(): void {
    const waiting = this.idle;
    this.idle = [];
    for (const resolve of waiting) resolve();
  }
}
