import fc from 'fast-check';

/**
 * Property tests draw from one seed, so that a run says the same twice. `PROPERTY_SEED=123 npx vitest run …` draws others.
 */
const FIXED_SEED = 20261201;

fc.configureGlobal({ seed: Number(process.env.PROPERTY_SEED ?? FIXED_SEED) });
