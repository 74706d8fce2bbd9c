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

/** What a Node without SIMD answers: only compiled programs can be started with its flags. */
const withoutSimd = (wanted: string): { readonly name: string; readonly told: string[] } =>
  JSON.parse(
    execFileSync(
      process.execPath,
      [
        '--input-type=module',
        '-e',
        `WebAssembly.validate = () => false;
         const { kernelVariant } = await import('./dist/worker/service/kernel-file.js');
         const told = [];
         const got = await kernelVariant(${wanted}, (message) => told.push(message));
         console.log(JSON.stringify({ name: got.ok ? got.value.name : got.failure.code, told }));`,
      ],
      OPTIONS,
    ),
  );

test('without SIMD the plain kernel serves and the custodian is told; one asked for is refused', () => {
  const { name, told } = withoutSimd('null');
  expect(name).toBe('plain');
  expect(told).toEqual([
    'This Node has no SIMD in WebAssembly: the plain kernel is used, several times slower.',
  ]);
  expect(withoutSimd("'relaxed'")).toEqual({ name: 'not-supported', told: [] });
});
