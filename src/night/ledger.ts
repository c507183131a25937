/** The run's folder and what is known of the products in it.
 *
 *     DIR/NAME.fits                 products, whole or absent
 *     DIR/.hatchel/records/ID.json  of each task: the key it was made under, its products' sums, its facts
 *     DIR/.hatchel/making/          products being written
 *     DIR/.hatchel/lock             number of the process at work
 *
 * A product is written in making/, summed, and moved to its place; then its record is written. So a run that is killed at
 * any moment leaves products whose record does not fit, or fits: never a record whose product is another's. */
import { randomBytes } from "node:crypto";
import fs from "node:fs";
import { basename, dirname, join } from "node:path";
import { fileDigest } from "./digest.js";
import { PlanError } from "./plan.js";
import type { Facts, Job, Task } from "./task.js";

/** Raised when records of before would be read wrongly. */
const FORMAT = 1;

export interface TaskRecord {
  format: number;
  /** Digest of inputs, options and program. */
  key: string;
  products: { name: string; sha256: string }[];
  facts: Facts;
}

export class Ledger {
  private readonly own: string;
  private readonly records: string;
  private readonly making: string;
  private nMade = 0;

  private constructor(readonly folder: string) {
    this.own = join(folder, ".hatchel");
    this.records = join(this.own, "records");
    this.making = join(this.own, "making");
  }

  /** Makes the folder where it is missing, and clears away what an interrupted run left half-made.
   * @throws PlanError when the folder cannot be used, or another run is at work in it. */
  static open(folder: string): Ledger {
    const ledger = new Ledger(folder);
    try {
      fs.mkdirSync(ledger.records, { recursive: true });
      ledger.lock();
      fs.rmSync(ledger.making, { recursive: true, force: true });
      fs.mkdirSync(ledger.making);
      for (const name of fs.readdirSync(ledger.records)) {
        if (name.endsWith(".part")) fs.rmSync(join(ledger.records, name));
      }
    } catch (error) {
      if (error instanceof PlanError) throw error;
      const { code } = error as NodeJS.ErrnoException;
      throw new PlanError(`${folder}: this folder cannot be written to (${code}); give another one with -o.`);
    }
    return ledger;
  }

  /** The record of a task, when it was made under this very key and its products are what they were. */
  async find(task: Task, key: string): Promise<TaskRecord | undefined> {
    const record = this.read(task.id);
    if (record === undefined || record.key !== key) return undefined;
    const names = record.products.map(({ name }) => name);
    const sums = await Promise.all(names.map((name) => fileDigest(this.pathOf(name)).catch(() => "")));
    return record.products.every(({ sha256 }, i) => sha256 === sums[i]) ? record : undefined;
  }

  pathOf(product: string): string {
    return join(this.folder, product);
  }

  /** Places of its own for a task's products. */
  roomFor({ products, folder }: Task): Pick<Job, "products" | "folder"> {
    const room = join(this.making, String(++this.nMade));
    for (const name of products) fs.mkdirSync(dirname(join(room, name)), { recursive: true });
    if (folder !== undefined) fs.mkdirSync(join(room, folder), { recursive: true });
    const paths = { products: products.map((name) => join(room, name)) };
    return folder === undefined ? paths : { ...paths, folder: join(room, folder) };
  }

  /** Moves what was written to its place, and notes it; takes away what the task made before and makes no more. */
  async accept(task: Task, key: string, written: Pick<Job, "products" | "folder">, facts: Facts): Promise<TaskRecord> {
    const inFolder = written.folder === undefined ? [] : fs.readdirSync(written.folder).sort();
    const names = [...task.products, ...inFolder.map((name) => `${task.folder}/${name}`)];
    const paths = [...written.products, ...inFolder.map((name) => join(written.folder!, name))];
    const sums = await Promise.all(paths.map(fileDigest));
    const before = this.read(task.id)?.products ?? [];
    for (const [i, name] of names.entries()) {
      fs.mkdirSync(dirname(this.pathOf(name)), { recursive: true });
      fs.renameSync(paths[i], this.pathOf(name));
    }
    const products = names.map((name, i) => ({ name, sha256: sums[i] }));
    const record: TaskRecord = { format: FORMAT, key, products, facts };
    this.write(this.recordPath(task.id), `${JSON.stringify(record, null, 1)}\n`);
    for (const { name } of before) if (!names.includes(name)) fs.rmSync(this.pathOf(name), { force: true });
    return record;
  }

  /** Text beside the products, whole or not at all. */
  writeText(name: string, text: string): void {
    this.write(this.pathOf(name), text);
  }

  /** Takes away what is half-made, and lets other runs in. */
  close(): void {
    fs.rmSync(this.making, { recursive: true, force: true });
    fs.rmSync(join(this.own, "lock"), { force: true });
  }

  private read(id: string): TaskRecord | undefined {
    try {
      const record: TaskRecord = JSON.parse(fs.readFileSync(this.recordPath(id), "utf8"));
      return record.format === FORMAT ? record : undefined;
    } catch {
      return undefined; // Missing or damaged: it is made anew.
    }
  }

  private recordPath(id: string): string {
    return join(this.records, `${id}.json`);
  }

  private write(path: string, text: string): void {
    const temporary = join(this.making, `${basename(path)}.${randomBytes(6).toString("hex")}`);
    fs.writeFileSync(temporary, text);
    fs.renameSync(temporary, path);
  }

  private lock(): void {
    const path = join(this.own, "lock");
    for (let i = 0; i < 2; i++) {
      try {
        fs.writeFileSync(path, `${process.pid}\n`, { flag: "wx" });
        return;
      } catch (error) {
        if ((error as NodeJS.ErrnoException).code !== "EEXIST") throw error;
      }
      const holder = Number(fs.readFileSync(path, "utf8"));
      if (isAtWork(holder)) {
        throw new PlanError(
          `${this.folder}: another run (process ${holder}) is at work there; wait for it, or remove ${path} if there is none.`,
        );
      }
      fs.rmSync(path, { force: true });
    }
    throw new PlanError(`${this.folder}: another run has just begun there; wait for it, or give another folder.`);
  }
}

function isAtWork(pid: number): boolean {
  if (!Number.isInteger(pid) || pid < 1 || pid === process.pid) return false;
  try {
    process.kill(pid, 0);
    return true;
  } catch (error) {
    return (error as NodeJS.ErrnoException).code === "EPERM";
  }
}
