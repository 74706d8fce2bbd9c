/** Runs tasks one after the other, in the order in which they came. */
export class TaskLine {
  private waiting = 0;
  private last: Promise<void> = Promise.resolve();

  /** `onDefect` gets what a task throws; the line goes on. */
  constructor(private readonly onDefect: (error: unknown) => void) {}

  get busy(): boolean {
    return this.waiting > 0;
  }

  /** Resolves when this task is done. */
  add(task: () => Promise<void> | void): Promise<void> {
    this.waiting += 1;
    this.last = this.last
      .then(task)
      .catch(this.onDefect)
      .then(() => {
        this.waiting -= 1;
      });
    return this.last;
  }

  /** Resolves when all that has been added so far is done. */
  async drained(): Promise<void> {
    await this.last;
  }
}
