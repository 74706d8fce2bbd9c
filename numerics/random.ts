/** Seeded random numbers: the only source of chance in this program. */
export interface Random {
  /** Uniform on [0, 1), 53 bits. */
  uniform(): number;
  /** Uniform integer in [0, below). */
  integer(below: number): number;
  normal(): number;
  gamma(shape: number): number;
  poisson(mean: number): number;
  /** A random permutation of 0 … n − 1. */
  permutation(n: number): Int32Array;
}

/** xoshiro128** of Blackman and Vigna (2021, ACM Trans. Math. Softw. 47:36), seeded by splitmix64. */
export function seededRandom(seed: number): Random {
  const mask = (1n << 64n) - 1n;
  let mix = BigInt(Math.trunc(seed)) & mask;
  const splitmix = (): bigint => {
    mix = (mix + 0x9e3779b97f4a7c15n) & mask;
    let z = mix;
    z = ((z ^ (z >> 30n)) * 0xbf58476d1ce4e5b9n) & mask;
    z = ((z ^ (z >> 27n)) * 0x94d049bb133111ebn) & mask;
    return z ^ (z >> 31n);
  };
  const s = Uint32Array.from({ length: 4 }, () => Number(splitmix() & 0xffffffffn));
  if (s.every((word) => word === 0)) s[0] = 1;
  const rotate = (x: number, k: number): number => ((x << k) | (x >>> (32 - k))) >>> 0;
  const next = (): number => {
    const result = Math.imul(rotate(Math.imul(s[1], 5) >>> 0, 7), 9) >>> 0;
    const t = (s[1] << 9) >>> 0;
    s[2] ^= s[0];
    s[3] ^= s[1];
    s[1] ^= s[2];
    s[0] ^= s[3];
    s[2] ^= t;
    s[3] = rotate(s[3], 11);
    return result;
  };
  const uniform = (): number => ((next() >>> 5) * 67108864 + (next() >>> 6)) / 9007199254740992;
  const integer = (below: number): number => Math.floor(uniform() * below);
  // Marsaglia's polar method
  let spare: number | null = null;
  const normal = (): number => {
    if (spare !== null) {
      const kept = spare;
      spare = null;
      return kept;
    }
    for (;;) {
      const a = 2 * uniform() - 1;
      const b = 2 * uniform() - 1;
      const q = a * a + b * b;
      if (q > 0 && q < 1) {
        const f = Math.sqrt((-2 * Math.log(q)) / q);
        spare = b * f;
        return a * f;
      }
    }
  };
  // Marsaglia and Tsang (2000), with their boost for shapes below one
  const gamma = (shape: number): number => {
    if (shape < 1) return gamma(shape + 1) * (1 - uniform()) ** (1 / shape);
    const d = shape - 1 / 3;
    const c = 1 / Math.sqrt(9 * d);
    for (;;) {
      const x = normal();
      const v = (1 + c * x) ** 3;
      if (v > 0 && Math.log(1 - uniform()) < 0.5 * x * x + d - d * v + d * Math.log(v)) return d * v;
    }
  };
  // products of uniforms for small means, a gamma split for large ones (Ahrens and Dieter 1974)
  const poisson = (mean: number): number => {
    let total = 0;
    let left = mean;
    while (left > 30) {
      const m = Math.floor((7 * left) / 8);
      const x = gamma(m);
      if (x > left) {
        let successes = 0;
        for (let i = 0; i < m - 1; i++) if (uniform() < left / x) successes++;
        return total + successes;
      }
      total += m;
      left -= x;
    }
    const limit = Math.exp(-left);
    let product = uniform();
    while (product > limit) {
      total++;
      product *= uniform();
    }
    return total;
  };
  const permutation = (n: number): Int32Array => {
    const order = Int32Array.from({ length: n }, (_, i) => i);
    for (let i = n - 1; i > 0; i--) {
      const j = integer(i + 1);
      const kept = order[i];
      order[i] = order[j];
      order[j] = kept;
    }
    return order;
  };
  return { uniform, integer, normal, gamma, poisson, permutation };
}
