/** y = A x for a symmetric row-major p × p matrix. */
export function symmetricTimes(a: Float64Array, x: Float64Array): Float64Array {
  const p = x.length;
  const y = new Float64Array(p);
  for (let i = 0; i < p; i++) {
    let sum = 0;
    const row = i * p;
    for (let j = 0; j < p; j++) sum += a[row + j] * x[j];
    y[i] = sum;
  }
  return y;
}
