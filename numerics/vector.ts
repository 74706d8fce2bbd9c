/** Small dense vector operations. Vectors of one call have one length; nothing here allocates unless it returns. */

export function dot(a: Float64Array, b: Float64Array): number {
  let sum = 0;
  for (let j = 0; j < a.length; j++) sum += a[j] * b[j];
  return sum;
}

export const norm = (a: Float64Array): number => Math.sqrt(dot(a, a));

export function maxAbs(a: Float64Array): number {
  let most = 0;
  for (let j = 0; j < a.length; j++) most = Math.max(most, Math.abs(a[j]));
  return most;
}

export function maxOf(a: Float64Array): number {
  let most = Number.NEGATIVE_INFINITY;
  for (let j = 0; j < a.length; j++) if (a[j] > most) most = a[j];
  return most;
}

/** y ← y + t x. */
export function addScaled(y: Float64Array, t: number, x: Float64Array): void {
  for (let j = 0; j < y.length; j++) y[j] += t * x[j];
}

export function subtract(a: Float64Array, b: Float64Array): Float64Array {
  const out = new Float64Array(a.length);
  for (let j = 0; j < a.length; j++) out[j] = a[j] - b[j];
  return out;
}

/** a + t b. */
export function plusScaled(a: Float64Array, t: number, b: Float64Array): Float64Array {
  const out = new Float64Array(a.length);
  for (let j = 0; j < a.length; j++) out[j] = a[j] + t * b[j];
  return out;
}

export function scaled(t: number, a: Float64Array): Float64Array {
  const out = new Float64Array(a.length);
  for (let j = 0; j < a.length; j++) out[j] = t * a[j];
  return out;
}

export function allFinite(a: Float64Array): boolean {
  for (let j = 0; j < a.length; j++) if (!Number.isFinite(a[j])) return false;
  return true;
}

/** Sum of vectors in the order given: the roster's, so that arrival order cannot change a bit. */
export function sumOf(vectors: readonly Float64Array[]): Float64Array {
  const out = new Float64Array(vectors[0].length);
  for (const vector of vectors) addScaled(out, 1, vector);
  return out;
}
