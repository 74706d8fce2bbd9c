import { Command } from 'commander';
import { SOFTWARE } from '../../protocol/version.js';
import { agrees, replayText } from '../report/replay-text.js';
import { acting, withTail } from './action.js';
import { EXIT } from './exit-codes.js';
import { ending, say, sayEnding, sayJson, terminalOf } from './terminal.js';

export function replayCommand(): Command {
  const command = new Command('replay')
    .description(
      'compute a run again from its journal, off line, and say whether everything comes out as stored',
    )
    .argument('<folder>', "a run's folder, or a result folder with a journal")
    .option('--json', 'one JSON object instead of sentences')
    .action(acting((folder: string, options: { json?: true }) => replay(folder, options.json === true)));
  return withTail(command, {
    examples: [
      'commonfit replay commonfit-state/runs/20310504-101500-4f6c2a91',
      'commonfit replay ./rehearsed --json',
    ],
    exits: [EXIT.document, EXIT.differs],
    more: 'Every ask is made again from the recorded answers and compared with what was asked, and result.json with the recomputed one. Nothing in the folder is changed.',
  });
}

async function replay(folder: string, json: boolean): Promise<number> {
  // Loaded here: the other commands start faster without it.
  const { recomputeFolder } = await import('../service/recompute.js');
  const recomputed = await recomputeFolder(folder);
  if (!recomputed.ok) return sayEnding(ending(EXIT.document, recomputed.failures).ending, json);
  const here = { software: SOFTWARE, node: process.version };
  const agreed = agrees(recomputed.value);
  if (json) sayJson({ event: 'replayed', agrees: agreed, ...recomputed.value, here });
  else say(replayText(recomputed.value, here, terminalOf(process.stdout).width));
  return agreed ? EXIT.ok : EXIT.differs;
}
