import { Command } from 'commander';
import { designColumns } from '../../protocol/specification/design-columns.js';
import { specificationText } from '../report/specification-text.js';
import { acting, withTail } from './action.js';
import { readDocument } from './document.js';
import { EXIT } from './exit-codes.js';
import { say, sayEnding, sayJson, terminalOf } from './terminal.js';

export function checkCommand(): Command {
  const command = new Command('check')
    .description('check a fit specification off line and say in words what it fits')
    .argument('<specification>', 'the fit specification, NAME.fit.yaml')
    .option('--json', 'one JSON object instead of words')
    .action(acting((file: string, options: { json?: true }) => check(file, options.json === true)));
  return withTail(command, { examples: ['commonfit check breaks.fit.yaml'], exits: [EXIT.document] });
}

async function check(file: string, json: boolean): Promise<number> {
  const read = await readDocument(file);
  if (!read.ok) return sayEnding(read.ending, json);
  const { specification, digest } = read.value;
  const columns = designColumns(specification);
  if (json)
    sayJson({ event: 'checked', digest, specification, coefficients: columns.map(({ name }) => name) });
  else say(specificationText(specification, columns, digest, terminalOf(process.stdout).width));
  return EXIT.ok;
}
