import { execFileSync } from 'node:child_process';
import { expect, test } from 'vitest';
import { kernelVariant } from '../../worker/service/kernel-file.js';

const OPTIONS = { encoding: 'utf8', cwd: new URL('../../', import.meta.url) } as const;

test('left to itself a worker takes a compiled kernel and has nothing to say', async () => {
  const told: string[] = [];
  const variant = await kernelVariant(null, (message) => told.push(message));
  expect(variant.ok && ['relaxed', 'simd']).toContain(variant.ok && variant.value.name);
  expect(told).toEqual([]);
});

test('a kernel asked for by name is the one taken', async () => {
  for (const name of ['plain', 'simd', 'relaxed'] as const) {
    const variant = await kernelVariant(name, () => undefined);
    expect(variant.ok && variant.value.name).toBe(name);
  }
});

test('a matrix wider than any kernel takes is left to the plain one, with a warning', async () => {
  const told: string[] = [];
  const variant = await kernelVariant('simd', (message) => told.push(message));
  expect(variant.ok && variant.value.open({ columns: 70_000, numbers: 10 }).name).toBe('plain');
  expect(told).toEqual(['70000 columns are too many for the kernel simd; the plain one serves.']);
});

/** What a Node without something answers: only compiled programs can be started with its flags. */
const nodeWithout = (
  taken: string,
  wanted: string,
  flags: readonly string[] = [],
): { readonly name: string; readonly told: string[] } =>
  JSON.parse(
    execFileSync(
      process.execPath,
      [
        ...flags,
        '--input-type=module',
        '-e',
        `${taken};
         const { kernelVariant } = await import('./dist/worker/service/kernel-file.js');
         const told = [];
         const got = await kernelVariant(${wanted}, (message) => told.push(message));
         console.log(JSON.stringify({ name: got.ok ? got.value.name : got.failure.code, told }));`,
      ],
      OPTIONS,
    ),
  );

test.each([
  ['SIMD in WebAssembly', 'WebAssembly.validate = () => false', []],
  ['shared memory', 'delete globalThis.SharedArrayBuffer', []],
  ['WebAssembly', '', ['--jitless']],
])(
  'without %s the plain kernel serves and the custodian is told; one asked for is refused',
  (lack, taken, flags) => {
    const { name, told } = nodeWithout(taken, 'null', flags);
    expect(name).toBe('plain');
    expect(told).toEqual([`This Node has no ${lack}: the plain kernel is used, several times slower.`]);
    expect(nodeWithout(taken, "'relaxed'", flags)).toEqual({ name: 'not-supported', told: [] });
  },
);
