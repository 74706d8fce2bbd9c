import { access, readdir, readFile, rm } from 'node:fs/promises';
import { join, resolve } from 'node:path';
import { fileURLToPath } from 'node:url';
import { parse } from 'yaml';
import { z } from 'zod';
import { type Document, readDocument } from './document.js';
import { EXIT } from './exit-codes.js';
import { interrupted, type LocalSite } from './on-this-machine.js';
import { type Attempt, done, ending } from './terminal.js';
import { runProgram, runWorkerCommand } from './worker-process.js';

/** Writes the tables, the site files and the specification of the pipe-breaks scenario. */
const GENERATOR = fileURLToPath(new URL('../../examples/pipe-breaks/generate.js', import.meta.url));

/** What the demo reads of a generated site file; the worker checks the rest. */
const siteFileSchema = z.looseObject({
  site: z.string(),
  coordinator: z.looseObject({ 'token-file': z.string() }),
});

/** Generates the scenario into a folder; each custodian approves its specification, as the policies ask for. */
export async function generatedSites(
  folder: string,
  url: string,
  curvatureMost: string,
  signal: AbortSignal,
): Promise<Attempt<readonly LocalSite[]>> {
  const args = ['--out', folder, '--url', url, '--curvature-most', curvatureMost];
  const made = await runProgram(GENERATOR, args, signal);
  if (signal.aborted) return interrupted();
  if (made.code !== 0) {
    const texts = ['The example could not be generated.', ...made.stderr.trimEnd().split('\n')];
    return { ok: false, ending: { exit: EXIT.defect, texts, failures: [] } };
  }
  const sites: LocalSite[] = [];
  for (const file of await filesEnding(folder, '.site.yaml')) {
    const siteFile = join(folder, file);
    const { site, coordinator } = siteFileSchema.parse(parse(await readFile(siteFile, 'utf8')));
    sites.push({ site, siteFile, tokenFile: resolve(folder, coordinator['token-file']) });
  }
  const document = await specificationIn(folder);
  const approved = await Promise.all(
    sites.map(({ siteFile }) => runWorkerCommand(['approve', siteFile, document], signal)),
  );
  if (signal.aborted) return interrupted();
  const refused = approved.find(({ code }) => code !== 0);
  if (refused === undefined) return done(sites);
  const texts = ['A specification could not be approved.', ...refused.stderr.trimEnd().split('\n')];
  return { ok: false, ending: { exit: EXIT.defect, texts, failures: [] } };
}

/** The specification that the generator wrote. */
export const generatedDocument = async (folder: string): Promise<Attempt<Document>> =>
  readDocument(await specificationIn(folder));

async function specificationIn(folder: string): Promise<string> {
  const [file] = await filesEnding(folder, '.fit.yaml');
  if (file === undefined) throw new Error(`the generator wrote no fit specification into ${folder}`);
  return join(folder, file);
}

/** Removes what an earlier demo left in a folder; a folder that is not a demo's is left alone and refused. */
export async function clearDemoFolder(folder: string): Promise<Attempt<null>> {
  const entries = await readdir(folder).catch(() => []);
  if (entries.length === 0) return done(null);
  const isDemo = await access(join(folder, 'coordinator', 'tokens.json')).then(
    () => true,
    () => false,
  );
  if (!isDemo) {
    return ending(EXIT.machine, [
      {
        code: 'state-unwritable',
        message: 'The folder is there already and holds something other than an earlier demo.',
        remedy: 'Name another --out.',
        where: { file: folder },
      },
    ]);
  }
  await rm(folder, { recursive: true });
  return done(null);
}

const filesEnding = async (folder: string, ending: string): Promise<string[]> =>
  (await readdir(folder)).filter((name) => name.endsWith(ending)).sort();
