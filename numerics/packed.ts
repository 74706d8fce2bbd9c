/** Packed lower triangle of a symmetric p × p matrix: (i, j ≤ i) at i (i + 1) / 2 + j. */

/** Order p of a packed triangle of the given length; throws a RangeError where none fits. */
export function orderOfPacked(length: number): number {
  const p = Math.round((Math.sqrt(8 * length + 1) - 1) / 2);
  if ((p * (p + 1)) / 2 !== length) throw new RangeError(`${length} is not the length of a packed triangle`);
  return p;
}

/** Full row-major p × p matrix of a packed triangle. */
export function unpackSymmetric(packed: Float64Array): Float64Array {
  const p = orderOfPacked(packed.length);
  const full = new Float64Array(p * p);
  for (let i = 0, at = 0; i < p; i++) {
    for (let j = 0; j <= i; j++, at++) {
      full[i * p + j] = packed[at];
      full[j * p + i] = packed[at];
    }
  }
  return full;
}

/** Packed lower triangle of a row-major p × p matrix; the upper triangle is not read. */
export function packSymmetric(full: Float64Array, p: number): Float64Array {
  const packed = new Float64Array((p * (p + 1)) / 2);
  for (let i = 0, at = 0; i < p; i++) for (let j = 0; j <= i; j++, at++) packed[at] = full[i * p + j];
  return packed;
}
