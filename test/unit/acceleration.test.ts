import { describe, expect, test } from 'vitest';
import { Acceleration } from '../../coordinator/consensus/acceleration.js';
import { norm, subtract } from '../../numerics/vector.js';

/** Iterates s ← T(s), accelerated or plain, and returns the residual norms. */
function iterate(
  map: (s: Float64Array) => Float64Array,
  start: Float64Array,
  rounds: number,
  accelerated: boolean,
) {
  const acceleration = new Acceleration();
  let s = start;
  const sizes: number[] = [];
  for (let k = 0; k < rounds; k++) {
    const image = map(s);
    const residual = subtract(image, s);
    sizes.push(norm(residual));
    s = accelerated ? acceleration.next(image, residual) : image;
  }
  return { s, sizes };
}

/** An affine contraction with rates from 0.99 down to 0.5, fixed point (1, …, 1). */
const rates = Float64Array.of(0.99, 0.9, 0.8, 0.7, 0.5);
const affine = (s: Float64Array): Float64Array => s.map((value, j) => 1 + rates[j] * (value - 1));

describe('Anderson acceleration', () => {
  test('solves an affine map in about as many rounds as it has dimensions (Walker and Ni 2011, with GMRES)', () => {
    const { sizes } = iterate(affine, new Float64Array(5), 10, true);
    const { sizes: plain } = iterate(affine, new Float64Array(5), 10, false);
    expect(sizes[9]).toBeLessThan(1e-7);
    expect(plain[9]).toBeGreaterThan(1e-3);
  });

  test('the safeguard throws an accelerated point away whose residual has grown, for the stored plain image', () => {
    const acceleration = new Acceleration();
    acceleration.next(Float64Array.of(1), Float64Array.of(1));
    const storedImage = Float64Array.of(1.5);
    acceleration.next(storedImage, Float64Array.of(0.5));
    expect(acceleration.next(Float64Array.of(99), Float64Array.of(50))).toBe(storedImage);
  });

  test('a residual that is not a number is thrown away as well', () => {
    const acceleration = new Acceleration();
    acceleration.next(Float64Array.of(1), Float64Array.of(1));
    const storedImage = Float64Array.of(1.5);
    acceleration.next(storedImage, Float64Array.of(0.5));
    expect(acceleration.next(Float64Array.of(Number.NaN), Float64Array.of(Number.NaN))).toBe(storedImage);
  });

  test('after three times thirty rounds without halving it stays off: plain images from then on', () => {
    const acceleration = new Acceleration();
    const images: Float64Array[] = [];
    const returned: Float64Array[] = [];
    for (let k = 0; k < 120; k++) {
      const image = Float64Array.of(k, Math.sin(k));
      images.push(image);
      returned.push(acceleration.next(image, Float64Array.of(1 - k * 1e-4, 0)));
    }
    expect(returned.slice(100)).toEqual(images.slice(100));
    expect(returned.slice(100).every((s, k) => s === images[100 + k])).toBe(true);
  });

  test('forgetting everything makes the next image plain', () => {
    const acceleration = new Acceleration();
    acceleration.next(Float64Array.of(1), Float64Array.of(1));
    acceleration.clear();
    const image = Float64Array.of(2);
    expect(acceleration.next(image, Float64Array.of(1))).toBe(image);
  });
});
