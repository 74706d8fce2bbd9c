/** Bytes of factors one shard keeps, and most factors however small. */
const BYTES_MOST = 64 * 1024 * 1024;
const ENTRIES_MOST = 8;

/**
 * Keeps what is expensive and depends on a diagonal metric alone, found again by the metric's content. A kept value has
 * the bits a new one would have, so answers do not depend on what was asked before. At least the last one is kept.
 */
export function metricCache<T>(bytesEach: number): (metric: Float64Array, make: () => T) => T {
  const most = Math.max(1, Math.min(ENTRIES_MOST, Math.floor(BYTES_MOST / Math.max(1, bytesEach))));
  const entries: { metric: Float64Array; value: T }[] = [];
  return (metric, make) => {
    const found = entries.find((entry) => sameNumbers(entry.metric, metric));
    if (found !== undefined) return found.value;
    const value = make();
    entries.push({ metric: Float64Array.from(metric), value });
    if (entries.length > most) entries.shift();
    return value;
  };
}

function sameNumbers(a: Float64Array, b: Float64Array): boolean {
  for (let j = 0; j < a.length; j++) if (a[j] !== b[j]) return false;
  return a.length === b.length;
}
