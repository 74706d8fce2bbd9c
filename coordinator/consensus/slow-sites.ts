/** A site this many times slower than the median one is called slow. */
const SLOW_FACTOR = 4;
/** Latest answers whose times count. */
const MEMORY = 3;

/** Who is slow, by the times answers took and the time that owed ones have been waited for. Times in milliseconds. */
export class SlowSites {
  private readonly took: number[][];
  private readonly owedFor: number[];

  /** Ages of the answers to the survey: what is known of a site before its first answer. */
  constructor(private readonly surveyAgesMs: readonly number[]) {
    this.took = surveyAgesMs.map(() => []);
    this.owedFor = surveyAgesMs.map(() => 0);
  }

  answered(site: number, afterMs: number): void {
    this.took[site] = [...this.took[site].slice(1 - MEMORY), afterMs];
    this.owedFor[site] = 0;
  }

  owes(site: number, forMs: number): void {
    this.owedFor[site] = forMs;
  }

  /** In roster order. */
  slow(): number[] {
    const ages = this.took.map((own, i) =>
      Math.max(median(own.length > 0 ? own : [this.surveyAgesMs[i]]), this.owedFor[i]),
    );
    const most = SLOW_FACTOR * median(ages);
    return [...ages.keys()].filter((i) => ages[i] > most);
  }
}

function median(values: readonly number[]): number {
  const sorted = [...values].sort((a, b) => a - b);
  const half = sorted.length >> 1;
  return sorted.length % 2 === 1 ? sorted[half] : (sorted[half - 1] + sorted[half]) / 2;
}
