import { writeFile } from 'node:fs/promises';
import { Command, InvalidArgumentError, Option } from 'commander';
import { fail } from '../../protocol/failure.js';
import { siteName } from '../../protocol/specification/fields.js';
import { type Holder, type May, minuteOf, openTokens } from '../service/tokens.js';
import { acting, withTail } from './action.js';
import { EXIT } from './exit-codes.js';
import { listHolders } from './holders.js';
import { STATE_DEFAULT } from './serve.js';
import { type Attempt, complain, done, ending, say, sayEnding } from './terminal.js';

export function admitCommand(): Command {
  const command = new Command('admit')
    .description('let a site, or an analyst, in: issues a new token, shown once; an earlier one is void')
    .argument('[site]', 'the name of the site, as specifications and its site file have it')
    .option('--analyst <name>', 'an analyst instead of a site')
    .addOption(
      new Option(
        '--may <what>',
        'of an analyst: watch runs and results only, or submit and cancel too (else submit)',
      ).choices(['watch', 'submit']),
    )
    .addOption(
      new Option('--expires <duration>', 'how long the token is good, such as 12h or 30d (else for ever)')
        .argParser(lastingMs)
        .conflicts(['revoke', 'list']),
    )
    .addOption(new Option('--revoke', 'void the token instead of issuing one').conflicts(['out', 'may']))
    .addOption(
      new Option('--list', 'say who holds a token, until when, and when it was last used').conflicts([
        'analyst',
        'revoke',
        'out',
        'may',
      ]),
    )
    .option('--json', 'with --list: one JSON object a holder')
    .option('--state <folder>', "the coordinator's state folder", STATE_DEFAULT)
    .option('--out <file>', 'write the token there (mode 0600, never over a file) instead of printing it')
    .action(acting(admit));
  return withTail(command, {
    examples: [
      'commonfit admit harrowmere --expires 90d --out harrowmere.token',
      'commonfit admit --analyst ines --may watch',
      'commonfit admit harrowmere --revoke',
      'commonfit admit --list',
    ],
    exits: [EXIT.notFound, EXIT.machine],
    more: 'A coordinator that runs on the same state folder takes the new token at once; it closes the links of a token that was revoked or has expired within seconds.',
  });
}

interface AdmitOptions {
  readonly analyst?: string;
  readonly may?: May;
  readonly expires?: number;
  readonly revoke?: true;
  readonly list?: true;
  readonly json?: true;
  readonly state: string;
  readonly out?: string;
}

async function admit(site: string | undefined, options: AdmitOptions): Promise<number> {
  if (options.list === true) {
    if (site === undefined) return await listHolders(options.state, options.json === true);
    complain('--list takes no name: it lists all who hold a token.');
    return EXIT.usage;
  }
  const holder = holderOf(site, options.analyst);
  if (holder === null || (options.may !== undefined && holder.kind === 'site')) {
    complain(
      holder === null
        ? 'Give one name, of a site or with --analyst: at most 64 letters, digits, hyphens, dots and underscores, the first a letter or digit.'
        : '--may goes with --analyst: a site answers, whatever its policy lets it.',
    );
    return EXIT.usage;
  }
  return options.revoke === true ? await revoke(holder, options.state) : await issue(holder, options);
}

function holderOf(site: string | undefined, analyst: string | undefined): Holder | null {
  const name = site ?? analyst;
  if (name === undefined || (site !== undefined && analyst !== undefined)) return null;
  if (!siteName.safeParse(name).success) return null;
  return { kind: site === undefined ? 'analyst' : 'site', name };
}

async function issue(holder: Holder, options: AdmitOptions): Promise<number> {
  const { out, state } = options;
  if (out !== undefined) {
    const reserved = await reserve(out);
    if (!reserved.ok) return sayEnding(reserved.ending, false);
  }
  const terms = { lastsMs: options.expires ?? null, may: options.may ?? 'submit' };
  const issued = await openTokens(state).issue(holder, terms);
  if (!issued.ok) return sayEnding(ending(EXIT.machine, [issued.failure]).ending, false);
  if (out === undefined) say([issued.value]);
  else await writeFile(out, `${issued.value}\n`);
  const where = out === undefined ? 'Hand it over by a safe way; it is not shown again' : `It is in ${out}`;
  const may = options.may === 'watch' ? ', who may watch' : '';
  const until =
    terms.lastsMs === null
      ? ''
      : ` It expires on ${minuteOf(new Date(Date.now() + terms.lastsMs).toISOString())}.`;
  complain(`This is the token of ${holder.kind} ${holder.name}${may}. ${where}.${until}`);
  return EXIT.ok;
}

async function revoke(holder: Holder, state: string): Promise<number> {
  const revoked = await openTokens(state).revoke(holder);
  if (!revoked.ok) return sayEnding(ending(EXIT.machine, [revoked.failure]).ending, false);
  if (revoked.value) {
    complain(`The token of ${holder.kind} ${holder.name} is void.`);
    return EXIT.ok;
  }
  const { failure } = fail('not-found', `There is no token of ${holder.kind} ${holder.name}.`, {
    remedy: 'See `commonfit admit --list`, and look at --state.',
  });
  return sayEnding(ending(EXIT.notFound, [failure]).ending, false);
}

const UNIT_MS: Readonly<Record<string, number>> = { s: 1000, m: 60_000, h: 3_600_000, d: 86_400_000 };
const LASTING_DAYS_MOST = 3650;

/** Durations as the documents write them, and days. */
function lastingMs(text: string): number {
  const [, digits, unit = ''] = /^(\d{1,9})(s|m|h|d)$/.exec(text) ?? [];
  const ms = Number(digits) * (UNIT_MS[unit] ?? Number.NaN);
  if (ms > 0 && ms <= LASTING_DAYS_MOST * UNIT_MS.d) return ms;
  throw new InvalidArgumentError(
    `It is a whole number with its unit, such as 30m, 12h or 30d, above 0 and at most ${LASTING_DAYS_MOST}d.`,
  );
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
