/**
 * The known name closest to what was written, for "did you mean"; null where nothing is close enough to be a slip of the
 * keys. Distance: insertions, deletions, substitutions and swaps of neighbours (Damerau 1964, restricted form).
 */
export function nearestName(written: string, known: readonly string[]): string | null {
  const reach = Math.max(1, Math.floor(Math.max(written.length, 4) / 3));
  let best: string | null = null;
  let bestDistance = reach + 1;
  for (const name of known) {
    if (Math.abs(name.length - written.length) >= bestDistance) continue;
    const distance = editDistance(plain(written), plain(name));
    if (distance < bestDistance) {
      best = name;
      bestDistance = distance;
    }
  }
  return best;
}

function editDistance(a: string, b: string): number {
  let before: number[] = [];
  let last = Array.from({ length: b.length + 1 }, (_, j) => j);
  for (let i = 1; i <= a.length; i++) {
    const row = [i];
    for (let j = 1; j <= b.length; j++) {
      const change = a[i - 1] === b[j - 1] ? 0 : 1;
      let least = Math.min((last[j] ?? 0) + 1, (row[j - 1] ?? 0) + 1, (last[j - 1] ?? 0) + change);
      if (i > 1 && j > 1 && a[i - 1] === b[j - 2] && a[i - 2] === b[j - 1]) {
        least = Math.min(least, (before[j - 2] ?? 0) + 1);
      }
      row.push(least);
    }
    before = last;
    last = row;
  }
  return last[b.length] ?? 0;
}

const plain = (name: string): string => name.toLowerCase().replaceAll('_', '-');
