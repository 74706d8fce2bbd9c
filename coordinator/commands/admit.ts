import { writeFile } from 'node:fs/promises';
import { Command } from 'commander';
import { siteName } from '../../protocol/specification/fields.js';
import { openTokens } from '../service/tokens.js';
import { acting, withTail } from './action.js';
import { EXIT } from './exit-codes.js';
import { STATE_DEFAULT } from './serve.js';
import { type Attempt, complain, done, ending, say, sayEnding } from './terminal.js';

export function admitCommand(): Command {
  const command = new Command('admit')
    .description('let a site, or an analyst, in: issues a new token, shown once; an earlier one is void')
    .argument('[site]', 'the name of the site, as specifications and its site file have it')
    .option('--analyst <name>', 'an analyst instead of a site')
    .option('--state <folder>', "the coordinator's state folder", STATE_DEFAULT)
    .option('--out <file>', 'write the token there (mode 0600, never over a file) instead of printing it')
    .action(acting(admit));
  return withTail(command, {
    examples: ['commonfit admit harrowmere --out harrowmere.token', 'commonfit admit --analyst ines'],
    exits: [EXIT.machine],
    more: 'A coordinator that runs on the same state folder takes the new token at once.',
  });
}

interface AdmitOptions {
  readonly analyst?: string;
  readonly state: string;
  readonly out?: string;
}

async function admit(site: string | undefined, options: AdmitOptions): Promise<number> {
  const name = site ?? options.analyst;
  if (
    name === undefined ||
    (site !== undefined && options.analyst !== undefined) ||
    !siteName.safeParse(name).success
  ) {
    complain(
      'Give one name, of a site or with --analyst: at most 64 letters, digits, hyphens, dots and underscores, the first a letter or digit.',
    );
    return EXIT.usage;
  }
  const kind = site === undefined ? 'analyst' : 'site';
  if (options.out !== undefined) {
    const reserved = await reserve(options.out);
    if (!reserved.ok) return sayEnding(reserved.ending, false);
  }
  const issued = await openTokens(options.state).issue({ kind, name });
  if (!issued.ok) return sayEnding(ending(EXIT.machine, [issued.failure]).ending, false);
  if (options.out === undefined) say([issued.value]);
  else await writeFile(options.out, `${issued.value}\n`);
  const where =
    options.out === undefined
      ? 'Hand it over by a safe way; it is not shown again'
      : `It is in ${options.out}`;
  complain(`This is the token of ${kind} ${name}. ${where}.`);
  return EXIT.ok;
}

/** Makes the file before the token exists: a token that could not be written would void the one before for nothing. */
async function reserve(file: string): Promise<Attempt<null>> {
  try {
    await writeFile(file, '', { mode: 0o600, flag: 'wx' });
    return done(null);
  } catch (error) {
    const code = (error as NodeJS.ErrnoException).code ?? 'unknown';
    return ending(EXIT.machine, [
      {
        code: 'state-unwritable',
        message: code === 'EEXIST' ? 'The file is there already.' : `The file cannot be written (${code}).`,
        remedy: 'Name another --out, or remove the file.',
        where: { file },
      },
    ]);
  }
}
