import { readFile } from 'node:fs/promises';
import { type Command, Option } from 'commander';
import { z } from 'zod';
import { FAILURE_CODES, type Failure } from '../../protocol/failure.js';
import { untrustedReason } from '../../protocol/link/certificate.js';
import { EXIT } from './exit-codes.js';
import { requestTo, type Trust } from './request.js';
import { type Attempt, done, ending } from './terminal.js';
import { trustOf } from './trust.js';

/** Whom an analyst's command talks to, and as whom. */
export interface Analyst extends Trust {
  /** `http://127.0.0.1:7443`, no slash at the end. */
  readonly url: string;
  readonly token: string;
}

export interface AnalystOptions {
  readonly url: string;
  readonly tokenFile?: string;
  readonly caFile?: string;
  readonly certificateFile?: string;
  readonly keyFile?: string;
  readonly plainText?: true;
}

export const URL_DEFAULT = 'http://127.0.0.1:7443';
const TOKEN_FILE_DEFAULT = './commonfit-state/analyst.token';
/** A reply that is not a stream must come within this time. Milliseconds. */
const REPLY_DEADLINE_MS = 30_000;

/** Adds the options that say where the coordinator is and whom to trust. */
export const withCoordinator = (command: Command): Command =>
  command
    .addOption(
      new Option('--url <url>', 'where the coordinator is').default(URL_DEFAULT).env('COMMONFIT_URL'),
    )
    .addOption(
      new Option(
        '--ca-file <file>',
        "certificate, PEM, of the authority to trust with https instead of the system's",
      ).env('COMMONFIT_CA_FILE'),
    );

/** The same, and those that say who asks. */
export function withAnalyst(command: Command): Command {
  return withCoordinator(command)
    .addOption(
      new Option(
        '--token-file <file>',
        `file with the analyst's token (else COMMONFIT_TOKEN_FILE, else ${TOKEN_FILE_DEFAULT})`,
      ),
    )
    .addOption(
      new Option(
        '--certificate-file <file>',
        "the analyst's certificate, PEM, for a coordinator that asks for one; goes with --key-file",
      ).env('COMMONFIT_CERTIFICATE_FILE'),
    )
    .addOption(new Option('--key-file <file>', 'its private key, PEM').env('COMMONFIT_KEY_FILE'))
    .option('--plain-text', 'allow an http address that is not this machine');
}

const LOOPBACK = /^(localhost|127(\.\d{1,3}){3}|\[::1\])$/;

/** Reads the token that the options, the environment or the default name. */
export async function analystOf(options: AnalystOptions): Promise<Attempt<Analyst>> {
  const url = URL.canParse(options.url) ? new URL(options.url) : null;
  if (url === null || !['http:', 'https:'].includes(url.protocol)) {
    return ending(EXIT.usage, [
      {
        code: 'field-value',
        message: `--url is \`${options.url}\`, which is no http or https address.`,
        remedy: `Give one such as ${URL_DEFAULT}.`,
      },
    ]);
  }
  if (url.protocol === 'http:' && !LOOPBACK.test(url.hostname) && options.plainText !== true) {
    return ending(EXIT.usage, [
      {
        code: 'field-value',
        message: `--url is \`${options.url}\`, which would send the token unencrypted.`,
        remedy: 'Give an https address, or say --plain-text if the network between is trusted.',
      },
    ]);
  }
  const trust = await trustOf(options);
  if (!trust.ok) return trust;
  const file = options.tokenFile ?? process.env.COMMONFIT_TOKEN_FILE ?? TOKEN_FILE_DEFAULT;
  try {
    const token = (await readFile(file, 'utf8')).trim();
    if (token !== '' && !/\s/.test(token)) {
      return done({ url: options.url.replace(/\/+$/, ''), token, ...trust.value });
    }
    return ending(EXIT.unauthorised, [
      {
        code: 'unauthorised',
        message: 'The file does not hold one token.',
        remedy: 'Put the token alone into it, on one line.',
        where: { file },
      },
    ]);
  } catch (error) {
    return ending(EXIT.unauthorised, [
      {
        code: 'file-unreadable',
        message: `The analyst's token cannot be read (${(error as NodeJS.ErrnoException).code ?? 'unknown'}).`,
        remedy: 'Name the file with --token-file; `commonfit serve` writes one into its state folder.',
        where: { file },
      },
    ]);
  }
}

const placeSchema = z
  .object({
    file: z.string().optional(),
    line: z.number().optional(),
    field: z.string().optional(),
    row: z.number().optional(),
    column: z.string().optional(),
    site: z.string().optional(),
  })
  .optional();
const failureSchema = z.object({
  code: z.enum(FAILURE_CODES).catch('internal'),
  message: z.string(),
  remedy: z.string().optional(),
  where: placeSchema,
});
/** Problem details (RFC 9457) with this service's extra members. */
const problemSchema = z.object({
  title: z.string().optional(),
  detail: z.string().optional(),
  code: z.enum(FAILURE_CODES).catch('internal').optional(),
  failures: z.array(failureSchema).optional(),
});

/** A request whose reply is looked at as it comes; `signal` ends it. */
export async function send(
  analyst: Analyst,
  method: 'GET' | 'POST',
  path: string,
  more: { body?: unknown; headers?: Record<string, string>; signal?: AbortSignal } = {},
): Promise<Attempt<Response>> {
  try {
    const response = await requestTo(analyst)(`${analyst.url}${path}`, {
      method,
      headers: {
        authorization: `Bearer ${analyst.token}`,
        ...(more.body === undefined ? {} : { 'content-type': 'application/json' }),
        ...more.headers,
      },
      ...(more.body === undefined ? {} : { body: JSON.stringify(more.body) }),
      ...(more.signal === undefined ? {} : { signal: more.signal }),
    });
    return response.ok ? done(response) : await refusedBy(response);
  } catch (error) {
    return unreachable(analyst, error);
  }
}

/** A request with a JSON reply of a known shape. */
export async function ask<T>(
  analyst: Analyst,
  method: 'GET' | 'POST',
  path: string,
  schema: z.ZodType<T>,
  body?: unknown,
): Promise<Attempt<T>> {
  const signal = AbortSignal.timeout(REPLY_DEADLINE_MS);
  const sent = await send(analyst, method, path, { signal, ...(body === undefined ? {} : { body }) });
  if (!sent.ok) return sent;
  try {
    return readReply(analyst, path, schema, await sent.value.text());
  } catch (error) {
    return unreachable(analyst, error);
  }
}

/** Reads the text of a reply as JSON of a known shape. */
export function readReply<T>(analyst: Analyst, path: string, schema: z.ZodType<T>, text: string): Attempt<T> {
  try {
    const parsed = schema.safeParse(JSON.parse(text));
    if (parsed.success) return done(parsed.data);
  } catch (error) {
    if (!(error instanceof SyntaxError)) throw error;
  }
  return ending(EXIT.unreachable, [
    {
      code: 'frame-malformed',
      message: `What answers at ${analyst.url}${path} does not speak as a commonfit coordinator does.`,
      remedy: 'Look at --url, and whether coordinator and command are of the same version.',
    },
  ]);
}

export function unreachable(analyst: Analyst, error: unknown): Attempt<never> {
  const cause = error instanceof Error && error.cause instanceof Error ? error.cause : error;
  const text =
    cause instanceof Error ? ((cause as NodeJS.ErrnoException).code ?? cause.message) : String(cause);
  const untrusted = untrustedReason(cause);
  if (untrusted !== null) {
    return ending(EXIT.untrusted, [
      {
        code: 'certificate-untrusted',
        message: `The certificate of ${analyst.url} is not trusted: ${untrusted}.`,
        remedy: 'Name the certificate of its authority with --ca-file, or renew the certificate.',
      },
    ]);
  }
  return ending(EXIT.unreachable, [
    {
      code: 'link-lost',
      message: `The coordinator at ${analyst.url} cannot be reached (${text}).`,
      remedy: 'Look whether `commonfit serve` runs there, and at --url.',
    },
  ]);
}

async function refusedBy(response: Response): Promise<Attempt<never>> {
  const read = problemSchema.safeParse(await response.json().catch(() => null));
  const problem = read.success ? read.data : {};
  const failure: Failure = {
    code: problem.code ?? 'internal',
    message: problem.detail ?? problem.title ?? `The coordinator answered with status ${response.status}.`,
  };
  const failures =
    problem.failures === undefined || problem.failures.length === 0 ? [failure] : problem.failures;
  return ending(exitOf(response.status, problem.failures !== undefined), failures as readonly Failure[]);
}

function exitOf(status: number, aboutDocument: boolean): number {
  if (status === 401 || status === 403) return EXIT.unauthorised;
  if (status === 404 || status === 409) return EXIT.notFound;
  if (aboutDocument || status === 400 || status === 413 || status === 422) return EXIT.document;
  return [408, 429, 503].includes(status) ? EXIT.unreachable : EXIT.defect;
}

/** A run as the coordinator lists it. */
export const runSummarySchema = z.object({
  run: z.string(),
  title: z.string(),
  digest: z.string(),
  state: z.enum(['waiting', 'running', 'ended']),
  outcome: z.string().nullable(),
  reason: z.string().nullable(),
  round: z.number(),
  submittedAt: z.string(),
  folder: z.string(),
});
export type RunSummary = z.infer<typeof runSummarySchema>;
