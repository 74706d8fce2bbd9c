import { join } from 'node:path';
import { type Checked, describeFailure } from '../../protocol/failure.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import type { ResultDocument } from '../run/result.js';
import { sha256Of, writeWhole } from './files.js';
import type { Notice } from './host-parts.js';
import { RUN_FILES, type RunEntry } from './run-entry.js';
import { readLog } from './run-log.js';

export interface ReportParts {
  readonly entry: Pick<RunEntry, 'run' | 'folder' | 'submittedAt'>;
  readonly specification: FitSpecification;
  readonly result: ResultDocument;
  readonly endedAt: string;
  readonly node: string;
  readonly notice: (notice: Notice) => void;
}

/**
 * Writes `report.html` beside the result that is kept already, with the journal's digest in it. The result is whole
 * without it: a page that cannot be made is told of in the operational log, and the run ends all the same.
 */
export async function keepReport(parts: ReportParts): Promise<Checked<null>> {
  const { entry, specification, result, endedAt, node, notice } = parts;
  const { run, folder, submittedAt } = entry;
  const events = await readLog(join(folder, RUN_FILES.log));
  if (!events.ok) return events;
  let page: string;
  try {
    // Loaded here: the plotting library takes a second, and a coordinator must be up before that.
    const { reportPage } = await import('../report/page/report-page.js');
    const journal = { file: RUN_FILES.journal, sha256: await sha256Of(join(folder, RUN_FILES.journal)) };
    page = reportPage({
      specification,
      result,
      events: events.value,
      run,
      submittedAt,
      endedAt,
      node,
      journal,
    });
  } catch (error) {
    notice({ level: 'error', code: 'internal', message: 'The report could not be made.', detail: error });
    return { ok: true, value: null };
  }
  const kept = await writeWhole(join(folder, RUN_FILES.report), page);
  if (!kept.ok) notice({ level: 'error', code: kept.failure.code, message: describeFailure(kept.failure) });
  return kept;
}
