let last: Promise<unknown> = Promise.resolve();

/**
 * Does work with `folder` as the working directory, which is where DuckDB looks for relative files: its search path
 * setting comes second to the working directory, so that a file of the same name there would be read instead. The
 * directory belongs to the whole process, hence one at a time; every other path of this program is absolute.
 */
export function inFolder<T>(folder: string, work: () => Promise<T>): Promise<T> {
  const turn = last.then(async () => {
    const before = process.cwd();
    process.chdir(folder);
    try {
      return await work();
    } finally {
      process.chdir(before);
    }
  });
  last = turn.catch(() => undefined);
  return turn;
}
