import { madd, VECTOR } from './vectors';

/** What this machine can do at most in 128-bit registers, for the kernels to be measured against. */

/** Reads `bytes` (a multiple of 256) once, in order, and adds everything up. */
export function readMemory(from: usize, bytes: usize): f64 {
  let s0 = f64x2.splat(0);
  let s1 = s0;
  let s2 = s0;
  let s3 = s0;
  let s4 = s0;
  let s5 = s0;
  let s6 = s0;
  let s7 = s0;
  for (const end = from + bytes; from < end; from += 8 * VECTOR) {
    s0 = f64x2.add(s0, v128.load(from));
    s1 = f64x2.add(s1, v128.load(from, 16));
    s2 = f64x2.add(s2, v128.load(from, 32));
    s3 = f64x2.add(s3, v128.load(from, 48));
    s4 = f64x2.add(s4, v128.load(from, 64));
    s5 = f64x2.add(s5, v128.load(from, 80));
    s6 = f64x2.add(s6, v128.load(from, 96));
    s7 = f64x2.add(s7, v128.load(from, 112));
  }
  const all = f64x2.add(f64x2.add(f64x2.add(s0, s1), f64x2.add(s2, s3)), f64x2.add(f64x2.add(s4, s5), f64x2.add(s6, s7)));
  return f64x2.extract_lane(all, 0) + f64x2.extract_lane(all, 1);
}

/** `times` rounds of 12 multiply-adds of two lanes each in registers alone: 48 · times operations. */
export function multiplyAdd(times: i32, factor: f64, term: f64): f64 {
  const a = f64x2.splat(factor);
  const b = f64x2.splat(term);
  let s0 = f64x2.splat(0);
  let s1 = f64x2.splat(1);
  let s2 = f64x2.splat(2);
  let s3 = f64x2.splat(3);
  let s4 = f64x2.splat(4);
  let s5 = f64x2.splat(5);
  let s6 = f64x2.splat(6);
  let s7 = f64x2.splat(7);
  let s8 = f64x2.splat(8);
  let s9 = f64x2.splat(9);
  let s10 = f64x2.splat(10);
  let s11 = f64x2.splat(11);
  for (; times > 0; times--) {
    s0 = madd(s0, a, b);
    s1 = madd(s1, a, b);
    s2 = madd(s2, a, b);
    s3 = madd(s3, a, b);
    s4 = madd(s4, a, b);
    s5 = madd(s5, a, b);
    s6 = madd(s6, a, b);
    s7 = madd(s7, a, b);
    s8 = madd(s8, a, b);
    s9 = madd(s9, a, b);
    s10 = madd(s10, a, b);
    s11 = madd(s11, a, b);
  }
  const low = f64x2.add(f64x2.add(f64x2.add(s0, s1), f64x2.add(s2, s3)), f64x2.add(s4, s5));
  const high = f64x2.add(f64x2.add(f64x2.add(s6, s7), f64x2.add(s8, s9)), f64x2.add(s10, s11));
  const all = f64x2.add(low, high);
  return f64x2.extract_lane(all, 0) + f64x2.extract_lane(all, 1);
}
