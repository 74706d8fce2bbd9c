import type { KernelName, KernelVariant } from '../../numerics/kernels/kernel.js';
import { kernelVariant } from '../../worker/service/kernel-file.js';

/** The compiled kernels, relaxed SIMD by its flag where this Node wants one. A build must have been made. */
export async function compiledKernels(): Promise<readonly KernelVariant[]> {
  const names: readonly KernelName[] = ['simd', 'relaxed'];
  return Promise.all(
    names.map(async (name) => {
      const variant = await kernelVariant(name, () => undefined);
      if (!variant.ok) throw new Error(variant.failure.message);
      return variant.value;
    }),
  );
}
