import { isBaseline, type MethodName, type Row } from './measure.js';

/** Median, 90 % and worst of the rounds to 1e-8 and 1e-6, numbers sent, failures: one block per method. */
export function summarise(rows: readonly Row[], methods: readonly MethodName[]): string {
  const lines = methods.flatMap((method) => {
    const own = rows.filter((row) => row.method === method);
    if (own.length === 0) return [];
    const traffic = own.map((row) => row.numbersUp).filter((count) => count !== null);
    const gaps = own.map((row) => row.trueGap).filter((gap) => gap !== null);
    return [
      `${method} (${own.length} problems)`,
      `  to 1e-6: ${spread(own.map((row) => row.rounds['1e-6']))}; to 1e-8: ${spread(own.map((row) => row.rounds['1e-8']))}`,
      `  numbers a site sends: ${quantile(traffic, 0.5)} median, ${Math.max(...traffic)} most` +
        (gaps.length > 0 ? `; worst true gap ${Math.max(...gaps).toExponential(1)}` : ''),
      isBaseline(method)
        ? `  uncertified, stopped by the true gap; not there in 500 rounds: ${own.filter((row) => row.failure !== null).length}`
        : `  failures ${own.filter((row) => row.failure !== null).length}, certificates contradicted ${own.filter((row) => row.contradicted).length}`,
    ];
  });
  return lines.join('\n');
}

export function spread(rounds: readonly (number | null)[]): string {
  const sorted = rounds.map((count) => count ?? Number.POSITIVE_INFINITY);
  const word = (value: number): string => (Number.isFinite(value) ? String(value) : 'never');
  return `${word(quantile(sorted, 0.5))} median, ${word(quantile(sorted, 0.9))} in nine of ten, ${word(Math.max(...sorted))} worst`;
}

/** Lower quantile of the sorted values. */
export function quantile(values: readonly number[], share: number): number {
  const sorted = [...values].sort((a, b) => a - b);
  return sorted[Math.min(sorted.length - 1, Math.floor(share * sorted.length))];
}
