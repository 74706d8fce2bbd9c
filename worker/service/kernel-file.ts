import { readFile } from 'node:fs/promises';
import { setFlagsFromString } from 'node:v8';
import type { KernelName, KernelVariant } from '../../numerics/kernels/kernel.js';
import { plainVariant } from '../../numerics/kernels/plain.js';
import { wasmVariant } from '../../numerics/kernels/variants.js';
import { type Checked, fail, succeed } from '../../protocol/failure.js';

/** Compiled kernels lie beside the compiled program; sources (under test) use those that the last build made. */
const FOLDER = import.meta.url.endsWith('.ts') ? '../../dist/numerics/kernels/' : '../../numerics/kernels/';

/** Lets this Node take relaxed SIMD where it is still behind a flag: only for a custodian who asks for it by name. */
const RELAXED_FLAG = '--experimental-wasm-relaxed-simd';
/** Compiles for speed at once; with tiers the first passes over the rows run three times slower. */
const NO_TIERS_FLAG = '--no-wasm-dynamic-tiering';

/**
 * The kernel asked for, or the fastest that this Node takes as it is. `onWarning` is told of a plain kernel that nobody
 * asked for. Fails with `not-supported` where the one asked for cannot be had, `file-unreadable` for a broken install.
 */
export async function kernelVariant(
  wanted: KernelName | null,
  onWarning: (message: string) => void,
): Promise<Checked<KernelVariant>> {
  if (wanted === 'plain') return succeed(plainVariant);
  if (wanted === 'relaxed') setFlagsFromString(RELAXED_FLAG);
  for (const name of wanted === null ? (['relaxed', 'simd'] as const) : [wanted]) {
    const bytes = await kernelBytes(name);
    if (!bytes.ok) return bytes;
    if (!WebAssembly.validate(bytes.value)) continue;
    setFlagsFromString(NO_TIERS_FLAG);
    return succeed(wasmVariant(name, new WebAssembly.Module(bytes.value), onWarning));
  }
  if (wanted !== null)
    return fail(
      'not-supported',
      `This Node (${process.versions.node}, ${process.arch}) has no ${wanted} kernel.`,
      {
        remedy: 'Leave --kernel out to use the fastest that it has.',
      },
    );
  onWarning('This Node has no SIMD in WebAssembly: the plain kernel is used, several times slower.');
  return succeed(plainVariant);
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
