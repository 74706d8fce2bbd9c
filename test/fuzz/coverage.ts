import { Session } from 'node:inspector';

interface Range {
  readonly startOffset: number;
  readonly endOffset: number;
  readonly count: number;
}
interface ScriptCoverage {
  readonly url: string;
  readonly functions: readonly { readonly ranges: readonly Range[] }[];
}

/** Which blocks of some scripts run, as V8 counts them (precise coverage, block by block). */
export class Coverage {
  private readonly session = new Session();

  /** `wanted` says of a script's URL whether it counts. */
  constructor(private readonly wanted: (url: string) => boolean) {
    this.session.connect();
    this.post('Profiler.enable');
    this.post('Profiler.startPreciseCoverage', { callCount: true, detailed: true });
  }

  /** The blocks that ran since the last call: script and offsets. */
  take(): string[] {
    const { result } = this.post('Profiler.takePreciseCoverage') as { result: readonly ScriptCoverage[] };
    const blocks: string[] = [];
    for (const { url, functions } of result) {
      if (!this.wanted(url)) continue;
      for (const { startOffset, endOffset, count } of functions.flatMap(({ ranges }) => ranges)) {
        if (count > 0) blocks.push(`${url}:${startOffset}-${endOffset}`);
      }
    }
    return blocks;
  }

  close(): void {
    this.session.disconnect();
  }

  /** The inspector of this process answers before `post` returns. */
  private post(method: string, params: object = {}): unknown {
    let answer: unknown = null;
    this.session.post(method, params, (error, result) => {
      if (error !== null) throw error;
      answer = result;
    });
    return answer;
  }
}
