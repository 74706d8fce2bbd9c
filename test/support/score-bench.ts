import { join } from 'node:path';
import type { Checked } from '../../protocol/failure.js';
import type { ModelDocument } from '../../protocol/model/model-document.js';
import type { ScoreFormat } from '../../worker/score/score-relation.js';
import { type Scored, type ScoreRequest, scoreTable } from '../../worker/score/score-table.js';
import { openEngine, sqlText } from '../../worker/source/duckdb.js';

export interface Predicted {
  readonly prediction: number | null;
  readonly linear_predictor: number | null;
  readonly note?: string | null;
  readonly [column: string]: unknown;
}

/** Scores a table of a test into `folder/out.FORMAT`. */
export const scoreFile = (
  model: ModelDocument,
  path: string,
  folder: string,
  more: Partial<ScoreRequest> & { readonly to?: ScoreFormat } = {},
): Promise<Checked<Scored>> => {
  const { to = 'parquet', ...rest } = more;
  return scoreTable({
    model,
    table: { path, kind: path.slice(path.lastIndexOf('.') + 1) as ScoreFormat },
    out: { path: join(folder, `out.${to}`), format: to },
    columns: null,
    flagRows: false,
    threads: 2,
    seen: () => undefined,
    signal: new AbortController().signal,
    ...rest,
  });
};

/** Rows of a file as DuckDB reads it, in their order. */
export async function rowsOf(path: string): Promise<Predicted[]> {
  const engine = await openEngine({ threads: 1 });
  try {
    const reader = await engine.connection.runAndReadAll(`select * from ${sqlText(path)}`);
    return reader.getRowObjectsJS() as Predicted[];
  } finally {
    engine.close();
  }
}

/** Writes rows of a CSV file as Parquet, numbers as doubles. */
export async function parquetOf(csv: string, path: string): Promise<string> {
  const engine = await openEngine({ threads: 1 });
  try {
    await engine.connection.run(
      `copy (select * from read_csv(${sqlText(csv)}, header = true)) to ${sqlText(path)} (format parquet)`,
    );
  } finally {
    engine.close();
  }
  return path;
}
