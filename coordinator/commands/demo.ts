import { join, relative, resolve } from 'node:path';
import { Command } from 'commander';
import { comparisonText, type Named } from '../report/comparison-text.js';
import { wrapped } from '../report/phrases.js';
import type { ResultDocument } from '../run/result.js';
import { acting, withTail } from './action.js';
import { clearDemoFolder, generatedDocument, generatedSites } from './demo-sites.js';
import { EXIT, exitCodeOf } from './exit-codes.js';
import { logSink } from './follow.js';
import { interruptible } from './interrupt.js';
import { runOnThisMachine } from './on-this-machine.js';
import { writeResultFolder } from './result-folder.js';
import { type Attempt, done, say, sayEnding, terminalOf } from './terminal.js';

/** The two runs: the same tables and specification under the default policy, and with no limit on curvature. */
const SCENES = [
  {
    folder: 'three-matrices',
    name: 'at most 3',
    most: '3',
    words: 'First, under the default policy: each site lets at most 3 curvature matrices leave.',
  },
  {
    folder: 'any-matrices',
    name: 'no limit',
    most: 'any',
    words: 'Once more, on the same rows, with no limit on curvature matrices.',
  },
] as const;
type Scene = (typeof SCENES)[number];

export function demoCommand(): Command {
  const command = new Command('demo')
    .description(
      'four made-up water utilities fit one model of their pipe breaks, on this machine, with a worker process each',
    )
    .option('--out <folder>', 'where the tables, site files and results go', './demo')
    .action(acting(demo));
  return withTail(command, {
    examples: ['commonfit demo --out ./demo'],
    exits: [EXIT.machine, EXIT.interrupted],
    outcomes: true,
  });
}

async function demo(options: { out: string }): Promise<number> {
  const out = resolve(options.out);
  const width = terminalOf(process.stdout).width;
  return await interruptible(async (signal) => {
    const shown: Named[] = [];
    for (const scene of SCENES) {
      if (shown.length > 0) say(['']);
      say([...wrapped(scene.words, width), '']);
      const played = await play(scene, join(out, scene.folder), signal);
      if (!played.ok) return sayEnding(played.ending, false);
      shown.push({ name: scene.name, result: played.value });
    }
    const [first, second] = shown as [Named, Named];
    say(['', 'The two runs side by side, by curvature matrices a site lets leave:']);
    say(comparisonText(first, second, width));
    const places = SCENES.map((scene) => relative('.', join(out, scene.folder, 'result')));
    say(
      wrapped(
        `The results are in ${places.join(' and ')}; the tables and site files are beside them.`,
        width,
      ),
    );
    say(wrapped('The rows are made up. Nothing here says anything about real pipes.', width));
    return Math.max(...shown.map(({ result }) => exitCodeOf(result.outcome, result.without)));
  });
}

async function play(scene: Scene, folder: string, signal: AbortSignal): Promise<Attempt<ResultDocument>> {
  const cleared = await clearDemoFolder(folder);
  if (!cleared.ok) return cleared;
  const run = await runOnThisMachine({
    folder,
    sites: (url) => generatedSites(folder, url, scene.most, signal),
    document: () => generatedDocument(folder),
    sink: logSink(false, false),
    signal,
  });
  if (!run.ok) return run;
  const written = await writeResultFolder(
    join(folder, 'result'),
    run.value.result,
    run.value.events,
    run.value.outcome.folder,
  );
  return written.ok ? done(run.value.result.document) : written;
}
