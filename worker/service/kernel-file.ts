import { readFile } from 'node:fs/promises';
import { setFlagsFromString } from 'node:v8';
import type { Crew } from '../../numerics/kernels/crew.js';
import type { KernelName, KernelVariant } from '../../numerics/kernels/kernel.js';
import { plainVariant } from '../../numerics/kernels/plain.js';
import { wasmVariant } from '../../numerics/kernels/variants.js';
import { type Checked, fail, succeed } from '../../protocol/failure.js';
import { openCrew } from './crew.js';

/** Compiled kernels lie beside the compiled program; sources (under test) use those that the last build made. */
const FOLDER = import.meta.url.endsWith('.ts') ? '../../dist/numerics/kernels/' : '../../numerics/kernels/';

/** Lets this Node take relaxed SIMD where it is still behind a flag: only for a custodian who asks for it by name. */
const RELAXED_FLAG = '--experimental-wasm-relaxed-simd';
/** Compiles for speed at once; with tiers the first passes over the rows run three times slower. */
const NO_TIERS_FLAG = '--no-wasm-dynamic-tiering';

/**
 * The kernel asked for, or the fastest that this Node takes as it is, on so many threads. `onWarning` is told of a plain
 * kernel, or of a single thread, that nobody asked for. Fails with `not-supported` where the kernel asked for cannot be had,
 * `file-unreadable` for a broken install.
 */
export async function kernelVariant(
  wanted: KernelName | null,
  onWarning: (message: string) => void,
  threads = 1,
): Promise<Checked<KernelVariant>> {
  const plain = (): Checked<KernelVariant> => {
    if (threads > 1) onWarning(`The plain kernel works on one thread: --threads ${threads} changes nothing.`);
    return succeed(plainVariant);
  };
  if (wanted === 'plain') return plain();
  const lack = lackOfThisNode();
  if (wanted === 'relaxed' && lack === null) setFlagsFromString(RELAXED_FLAG);
  for (const name of wanted === null ? (['relaxed', 'simd'] as const) : [wanted]) {
    const bytes = await kernelBytes(name);
    if (!bytes.ok) return bytes;
    if (lack !== null || !WebAssembly.validate(bytes.value)) continue;
    setFlagsFromString(NO_TIERS_FLAG);
    const module = new WebAssembly.Module(bytes.value);
    return succeed(wasmVariant(name, module, onWarning, await crewOf(threads, onWarning)));
  }
  if (wanted !== null)
    return fail(
      'not-supported',
      `This Node (${process.versions.node}, ${process.arch}) has no ${wanted} kernel.`,
      {
        remedy: 'Leave --kernel out to use the fastest that it has.',
      },
    );
  onWarning(
    `This Node has no ${lack ?? 'SIMD in WebAssembly'}: the plain kernel is used, several times slower.`,
  );
  return plain();
}

/** What a Node that was started with unusual flags may be without. */
function lackOfThisNode(): string | null {
  if (typeof WebAssembly === 'undefined') return 'WebAssembly';
  return typeof SharedArrayBuffer === 'undefined' ? 'shared memory' : null;
}

async function crewOf(threads: number, onWarning: (message: string) => void): Promise<Crew | null> {
  if (threads === 1) return null;
  const crew = await openCrew(threads);
  if (crew.ok) return crew.value;
  onWarning(`${crew.failure.message} One thread does the work.`);
  return null;
}

/** The compiled program of a kernel; fails with `file-unreadable`. */
export async function kernelBytes(name: KernelName): Promise<Checked<Uint8Array>> {
  const file = new URL(`${FOLDER}${name}.wasm`, import.meta.url);
  try {
    return succeed(await readFile(file));
  } catch (error) {
    const reason = error instanceof Error ? error.message : String(error);
    return fail('file-unreadable', `A kernel of this program cannot be read: ${reason}.`, {
      remedy: 'Install or build the program again, or say --kernel plain.',
    });
  }
}
