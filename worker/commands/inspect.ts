import type { Failure } from '../../protocol/failure.js';
import { checkColumns } from '../custody/policy.js';
import type { SiteFile } from '../custody/site-file.js';
import { buildRawShard } from '../design/build.js';
import { tableRequest } from '../design/request.js';
import type { RawShard } from '../design/shard.js';
import { besideSiteFile, readApprovals } from '../service/site-folder.js';
import { readTable } from '../source/read-table.js';
import { readSiteFile, readSpecification, type SpecificationFile } from './documents.js';
import { EXIT, type ExitCode, exitCodeOf } from './exit-codes.js';
import { inspectionLines } from './inspect-text.js';
import { inspectionOf } from './inspection.js';
import { giveUp, say, WIDTH_DEFAULT, widthOf } from './terminal.js';

export interface InspectOptions {
  readonly approvals?: string;
  readonly json: boolean;
}

/** Shows what a specification would read and send here; nothing leaves this machine. */
export async function inspect(siteFile: string, fitFile: string, options: InspectOptions): Promise<ExitCode> {
  const [site, specification] = await Promise.all([readSiteFile(siteFile), readSpecification(fitFile)]);
  if (!site.ok) return giveUp(site.failures);
  if (!specification.ok) return giveUp(specification.failures);
  const approvals = await readApprovals(options.approvals ?? besideSiteFile(site.value.file, 'approvals'));
  if (!approvals.ok) return giveUp([approvals.failure]);
  const approved = new Set(approvals.value.map(({ digest }) => digest));
  const raw = await rowsOf(site.value, specification.value);
  const inspection = inspectionOf(site.value, specification.value, approved, raw);
  if (options.json) say([JSON.stringify(inspection)]);
  else say(inspectionLines(inspection, widthOf(process.stdout) ?? WIDTH_DEFAULT));
  const [first] = inspection.refusals;
  if (first === undefined) return EXIT.ok;
  return first.code === 'site-unknown' ? EXIT.policy : exitCodeOf(first);
}

/** The table is not read where the policy keeps a column shut. */
async function rowsOf(site: SiteFile, file: SpecificationFile): Promise<RawShard | Failure | null> {
  const { specification } = file;
  if (checkColumns(site.policy, specification) !== null) return null;
  const table = await readTable(site.table, tableRequest(specification, site.shard));
  if (!table.ok) return table.failure;
  const raw = buildRawShard(specification, table.value);
  return raw.ok ? raw.value : raw.failure;
}
