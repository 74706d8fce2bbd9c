import type { Failure } from '../../protocol/failure.js';

/** What a worker tells its custodian, for the log: as sentences (`log-lines.ts`) or as JSON lines. */
export type WorkerEvent =
  | {
      readonly event: 'connected';
      readonly url: string;
      readonly site: string;
      readonly shard: { readonly index: number; readonly of: number };
      readonly coordinator: string;
      /** What computes over the rows, as the coordinator is told. */
      readonly kernel: string;
    }
  | {
      readonly event: 'disconnected';
      /** Close code, or null where no link came about. */
      readonly closeCode: number | null;
      readonly reason: string;
      readonly retryMs: number;
      /** 1 for the first try after a link that worked. */
      readonly attempt: number;
    }
  | { readonly event: 'run'; readonly run: string; readonly title: string; readonly digest: string }
  | {
      readonly event: 'table';
      readonly run: string;
      readonly rowsUsed: number;
      readonly rowsDropped: number;
      readonly columns: number;
      /** Of the design columns, where they are not in memory; else 0. */
      readonly bytesOnDisk: number;
      readonly tookMs: number;
    }
  | {
      readonly event: 'answered';
      readonly run: string;
      readonly ask: number;
      /** In words, one for each work item. */
      readonly asked: readonly string[];
      readonly kinds: readonly string[];
      /** Numbers and curvature matrices in this answer, and in the run so far. */
      readonly numbers: number;
      readonly curvature: number;
      readonly runNumbers: number;
      readonly runCurvature: number;
      /** An ask that was answered before: it left once more and counts once. */
      readonly repeated: boolean;
      readonly tookMs: number;
    }
  | { readonly event: 'refused'; readonly run: string; readonly ask: number; readonly failure: Failure }
  | {
      /** Left unanswered: `newest` is the ask of the same run that came meanwhile. */
      readonly event: 'skipped';
      readonly run: string;
      readonly ask: number;
      readonly newest: number;
    }
  | {
      readonly event: 'run-ended';
      readonly run: string;
      readonly outcome: string;
      readonly asks: number;
      readonly numbers: number;
      readonly curvature: number;
    }
  | { readonly event: 'warning'; readonly message: string }
  | { readonly event: 'stopping'; readonly answersOpen: number; readonly graceMs: number }
  | { readonly event: 'stopped'; readonly failure: Failure | null };
