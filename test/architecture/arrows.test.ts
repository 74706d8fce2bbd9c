import { readdirSync, readFileSync } from 'node:fs';
import { dirname, join, relative } from 'node:path';
import { fileURLToPath } from 'node:url';
import { describe, expect, test } from 'vitest';

/** The arrows and the purity of DEVELOPERS.md, read off the source text. */
const root = join(dirname(fileURLToPath(import.meta.url)), '../..');
const FOLDERS = ['protocol', 'numerics', 'coordinator', 'worker', 'examples'];

/** Which top folders each may import. */
const MAY_IMPORT: Record<string, readonly string[]> = {
  protocol: ['protocol'],
  numerics: ['numerics'],
  coordinator: ['coordinator', 'protocol', 'numerics'],
  worker: ['worker', 'protocol', 'numerics'],
  examples: ['examples', 'worker', 'numerics', 'protocol'],
};

/** Folders of the coordinator in the order in which imports may point: to the right, or within. */
const COORDINATOR_ORDER = [
  'main.ts',
  'commands',
  'service',
  'journal',
  'panel',
  'report',
  'run',
  'inference',
  'consensus',
];
const WORKER_ORDER = [
  'main.ts',
  'commands',
  'service',
  'custody',
  'score',
  'local',
  'design',
  'losses',
  'source',
];

const PURE = [
  'numerics',
  'protocol',
  'coordinator/run',
  'coordinator/inference',
  'coordinator/consensus',
  'coordinator/panel',
  'coordinator/report',
  'worker/losses',
  'worker/local',
  'worker/design',
];
const IMPURE_EXCEPTIONS = ['protocol/link'];
/** Clocks, timers, sockets, files, processes, consoles, chance. */
const IMPURE =
  /\bDate\b|\bperformance\b|\bset(Timeout|Interval|Immediate)\b|\bqueueMicrotask\b|\bconsole\b|\bprocess\b|Math\.random|\bfetch\(|from 'node:(?!crypto|buffer)|from '(ws|fastify|pino|@duckdb[^']*|close-with-grace|commander)'|\brandom(Bytes|UUID|Int)\b/;

const files = FOLDERS.flatMap((folder) => sources(join(root, folder))).map((path) => {
  const text = readFileSync(path, 'utf8');
  return { path: relative(root, path), text, imports: importsOf(path, text) };
});

function sources(folder: string): string[] {
  return readdirSync(folder, { withFileTypes: true }).flatMap((entry) => {
    const path = join(folder, entry.name);
    if (entry.isDirectory()) return sources(path);
    return entry.name.endsWith('.ts') ? [path] : [];
  });
}

/** Relative imports (static, type and dynamic) as paths from the root. */
function importsOf(path: string, text: string): string[] {
  return [...text.matchAll(/(?:from|import\()\s*'(\.[^']+)'/g)].map(([, target]) =>
    relative(root, join(dirname(path), target)).replace(/\.js$/, '.ts'),
  );
}

const withoutTypeImports = (text: string): string => text.replace(/^(import|export) type [\s\S]*?;$/gm, '');

const within = (path: string, folders: readonly string[]): boolean =>
  folders.some((folder) => path === folder || path.startsWith(`${folder}/`));

/** Comments and strings in quotes say what they like. */
const codeOf = (text: string): string =>
  text
    .replace(/\/\*[\s\S]*?\*\//g, '')
    .replace(/^\s*\/\/.*$/gm, '')
    .replace(/(?<!from )'(?:[^'\\\n]|\\.)*'/g, "''");

describe('arrows', () => {
  test('there is something to check', () => {
    expect(files.length).toBeGreaterThan(60);
  });

  test('top folders import only what they may', () => {
    const wrong = files.flatMap(({ path, imports }) =>
      imports
        .filter((target) => !MAY_IMPORT[path.split('/')[0]].includes(target.split('/')[0]))
        .map((target) => `${path} imports ${target}`),
    );
    expect(wrong).toEqual([]);
  });

  test.each([
    ['coordinator', COORDINATOR_ORDER],
    ['worker', WORKER_ORDER],
  ])('inside %s, imports point one way', (service, order) => {
    const wrong = files
      .filter(({ path }) => path.startsWith(`${service}/`))
      .flatMap(({ path, imports }) => {
        const from = order.indexOf(path.split('/')[1]);
        expect(from, `${path} is in a folder the order does not name`).toBeGreaterThanOrEqual(0);
        return imports
          .filter((target) => target.startsWith(`${service}/`) && order.indexOf(target.split('/')[1]) < from)
          .map((target) => `${path} imports ${target}`);
      });
    expect(wrong).toEqual([]);
  });

  test('no file imports itself in a circle', () => {
    // a type names a shape and is gone when the program runs: only values make a circle
    const graph = new Map(files.map(({ path, text }) => [path, importsOf(path, withoutTypeImports(text))]));
    const done = new Set<string>();
    const circle = (path: string, trail: readonly string[]): string[] | null => {
      if (trail.includes(path)) return [...trail.slice(trail.indexOf(path)), path];
      if (done.has(path)) return null;
      for (const next of graph.get(path) ?? []) {
        const found = circle(next, [...trail, path]);
        if (found !== null) return found;
      }
      done.add(path);
      return null;
    };
    expect(files.map(({ path }) => circle(path, [])).filter((found) => found !== null)).toEqual([]);
  });

  test('only the WebSocket link and the service that upgrades know the socket library', () => {
    const users = files.filter(({ text }) => /from 'ws'/.test(text)).map(({ path }) => path);
    expect(users.filter((path) => !within(path, ['protocol/link', 'coordinator/service']))).toEqual([]);
  });
});

describe('purity', () => {
  test('the core knows no clock, timer, socket, file, process, console or chance of its own', () => {
    const wrong = files
      .filter(({ path }) => within(path, PURE) && !within(path, IMPURE_EXCEPTIONS))
      .flatMap(({ path, text }) => {
        const found = IMPURE.exec(codeOf(text));
        return found === null ? [] : [`${path}: ${found[0]}`];
      });
    expect(wrong).toEqual([]);
  });

  test('the check itself sees an impure line', () => {
    expect(IMPURE.test(codeOf('const now = Date.now();'))).toBe(true);
    expect(IMPURE.test(codeOf("import { readFileSync } from 'node:fs';"))).toBe(true);
    expect(IMPURE.test(codeOf('// Date is only named here'))).toBe(false);
  });
});

describe('size', () => {
  test('no source file has grown past 350 lines', () => {
    const long = files
      .map(({ path, text }) => ({ path, lines: text.split('\n').length }))
      .filter(({ lines }) => lines > 350);
    expect(long).toEqual([]);
  });
});
