/** Entries of rows, row after row (compressed sparse rows). What is not listed is zero; a zero may be listed. */
export interface Entries {
  readonly rowCount: number;
  /** Row r has the entries starts[r] ≤ e < starts[r + 1]: rowCount + 1 numbers. */
  readonly starts: Int32Array;
  readonly columns: Int32Array;
  readonly values: Float64Array;
}

/** How many entries each of p columns has, in the rows from ≤ r < to. */
export function entryCounts({ starts, columns }: Entries, p: number, from: number, to: number): Int32Array {
  const counts = new Int32Array(p);
  for (let e = starts[from]; e < starts[to]; e++) counts[columns[e]]++;
  return counts;
}

/**
 * The entries of columns that have a place, there; `placeOf` gives a column's place, or −1 where it has none. With
 * `to`, values become (value − center) / scale of their new column.
 */
export function placedEntries(
  entries: Entries,
  placeOf: Int32Array,
  to: { readonly center: Float64Array; readonly scale: Float64Array } | null,
): Entries {
  const { rowCount, starts } = entries;
  const placed = new Int32Array(rowCount + 1);
  for (let row = 0; row < rowCount; row++) {
    let count = 0;
    for (let e = starts[row]; e < starts[row + 1]; e++) if (placeOf[entries.columns[e]] >= 0) count++;
    placed[row + 1] = placed[row] + count;
  }
  const columns = new Int32Array(placed[rowCount]);
  const values = new Float64Array(placed[rowCount]);
  for (let e = 0, at = 0; e < starts[rowCount]; e++) {
    const place = placeOf[entries.columns[e]];
    if (place < 0) continue;
    columns[at] = place;
    const value = entries.values[e];
    values[at++] = to === null ? value : (value - to.center[place]) / to.scale[place];
  }
  return { rowCount, starts: placed, columns, values };
}

/** The rows in another order: row `order[to]` comes to stand at `to`. */
export function reorderedEntries(entries: Entries, order: Int32Array): Entries {
  const starts = new Int32Array(order.length + 1);
  order.forEach((row, to) => {
    starts[to + 1] = starts[to] + entries.starts[row + 1] - entries.starts[row];
  });
  const columns = new Int32Array(starts[order.length]);
  const values = new Float64Array(columns.length);
  order.forEach((row, to) => {
    const [first, end] = [entries.starts[row], entries.starts[row + 1]];
    columns.set(entries.columns.subarray(first, end), starts[to]);
    values.set(entries.values.subarray(first, end), starts[to]);
  });
  return { rowCount: order.length, starts, columns, values };
}
