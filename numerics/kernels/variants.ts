import type { Crew } from './crew.js';
import type { KernelName, KernelVariant } from './kernel.js';
import { COLUMNS_MOST, KernelMemory } from './kernel-memory.js';
import { plainKernel } from './plain.js';
import { WasmKernel } from './wasm-kernel.js';

/** What `numerics/kernels/assembly` exports. Addresses are in bytes; 0 means none where the source says so. */
export interface KernelExports {
  rowProducts(x: number, p: number, rows: number, theta: number, out: number): void;
  addWeightedRows(x: number, p: number, rows: number, weights: number, out: number): void;
  addWeightedSquares(x: number, p: number, rows: number, weights: number, out: number): void;
  packRows(x: number, p: number, rows: number, weights: number, packed: number, padded: number): void;
  addGram(
    packed: number,
    padded: number,
    rows: number,
    sums: number,
    firstColumn: number,
    endColumn: number,
  ): void;
  pass(
    loss: number,
    threshold: number,
    rowCountTotal: number,
    x: number,
    p: number,
    rows: number,
    y: number,
    weights: number,
    offset: number,
    theta: number,
    eta: number,
    slopes: number,
    gradient: number,
    sums: number,
  ): void;
  curvatures(
    loss: number,
    threshold: number,
    rowCountTotal: number,
    rows: number,
    y: number,
    weights: number,
    eta: number,
    out: number,
  ): void;
  cholesky(a: number, order: number): number;
  solve(l: number, order: number, b: number): void;
  foldIn(triangle: number, columns: number, block: number, rows: number): void;
  exponentials(values: number, count: number, out: number): void;
  logarithms(values: number, count: number, out: number): void;
}

export const instantiate = (module: WebAssembly.Module, memory: WebAssembly.Memory): KernelExports =>
  new WebAssembly.Instance(module, { env: { memory } }).exports as unknown as KernelExports;

/**
 * A variant in WebAssembly, on the threads of a crew if there is one. Where a machine does not give it the memory,
 * `onWithout` is told in words and the plain twin serves that shard.
 */
export function wasmVariant(
  name: KernelName,
  module: WebAssembly.Module,
  onWithout: (message: string) => void,
  crew: Crew | null = null,
): KernelVariant {
  return {
    name,
    threads: crew?.size ?? 1,
    open(room) {
      if (room.columns > COLUMNS_MOST) {
        onWithout(`${room.columns} columns are too many for the kernel ${name}; the plain one serves.`);
        return plainKernel;
      }
      try {
        const place = new KernelMemory(room, crew?.size ?? 1);
        return new WasmKernel(name, instantiate(module, place.memory), place, module, crew);
      } catch (error) {
        if (!(error instanceof RangeError)) throw error;
        onWithout(`No memory for the kernel ${name} (${error.message}); the plain one serves.`);
        return plainKernel;
      }
    },
  };
}
