import { stat } from 'node:fs/promises';
import { join, resolve } from 'node:path';
import { SOFTWARE } from '../../protocol/version.js';
import { verifies, verifyText } from '../report/verify-text.js';
import { RUN_FILES } from '../service/run-entry.js';
import { type AnalystOptions, analystOf, ask, runSummarySchema } from './analyst.js';
import { EXIT } from './exit-codes.js';
import { type Attempt, done, ending, say, sayEnding, sayJson, terminalOf } from './terminal.js';

/** `result --verify`: checks a result folder, or the folder of a run of a coordinator on this machine. */
export async function verify(folderOrRun: string, options: AnalystOptions, json: boolean): Promise<number> {
  const folder = await folderOf(folderOrRun, options);
  if (!folder.ok) return sayEnding(folder.ending, json);
  // Loaded here: the other commands start faster without it.
  const { verifyFolder } = await import('../service/verify-folder.js');
  const verified = await verifyFolder(folder.value);
  if (!verified.ok) return sayEnding(ending(EXIT.document, verified.failures).ending, json);
  const here = { software: SOFTWARE, node: process.version };
  const good = verifies(verified.value);
  if (json) sayJson({ event: 'verified', verifies: good, ...verified.value, here });
  else say(verifyText(verified.value, here, terminalOf(process.stdout).width));
  return good ? EXIT.ok : EXIT.differs;
}

async function folderOf(folderOrRun: string, options: AnalystOptions): Promise<Attempt<string>> {
  if (await isFolder(folderOrRun)) return done(folderOrRun);
  if (/[/\\]/.test(folderOrRun))
    return ending(EXIT.document, [
      { code: 'file-unreadable', message: 'There is no such folder.', where: { file: resolve(folderOrRun) } },
    ]);
  const analyst = await analystOf(options);
  if (!analyst.ok) return analyst;
  const found = await ask(
    analyst.value,
    'GET',
    `/v1/runs/${encodeURIComponent(folderOrRun)}`,
    runSummarySchema,
  );
  if (!found.ok) return found;
  const { folder } = found.value;
  if (await isFile(join(folder, RUN_FILES.journal))) return done(folder);
  return ending(EXIT.document, [
    {
      code: 'file-unreadable',
      message: `The journal of run ${folderOrRun} is in ${folder} on the coordinator's machine and cannot be read from here.`,
      remedy: 'Verify there, or copy the folder and name it.',
    },
  ]);
}

const isFolder = (path: string): Promise<boolean> =>
  stat(path).then(
    (found) => found.isDirectory(),
    () => false,
  );

const isFile = (path: string): Promise<boolean> =>
  stat(path).then(
    (found) => found.isFile(),
    () => false,
  );
