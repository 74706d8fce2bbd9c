import { type Random, seededRandom } from '../../numerics/random.js';

/** One pipe segment, watched for some years. All of it is invented. */
export interface Segment {
  readonly segment: string;
  /** Breaks while it was watched. */
  readonly breaks: number;
  /** Length in kilometres times years watched. */
  readonly km_years: number;
  readonly age_years: number;
  readonly diameter_mm: number;
  readonly material: (typeof MATERIALS)[number];
  readonly pressure_bar: number;
  readonly soil: (typeof SOILS)[number];
  readonly depth_m: number;
  readonly traffic: (typeof TRAFFIC)[number];
  /** Whether it broke at all: a response for a logistic fit. */
  readonly broke: 'yes' | 'no';
}

export const MATERIALS = ['pvc', 'ductile-iron', 'cast-iron', 'steel'] as const;
export const SOILS = ['sand', 'clay', 'loam', 'peat'] as const;
export const TRAFFIC = ['light', 'medium', 'heavy'] as const;
const DIAMETERS_MM = [80, 100, 150, 200, 250, 300, 400, 600] as const;

interface Utility {
  readonly name: string;
  readonly segments: number;
  /** Shares in the order of `MATERIALS`, `SOILS`, `TRAFFIC` and `DIAMETERS_MM`. */
  readonly materials: readonly number[];
  readonly soils: readonly number[];
  readonly traffic: readonly number[];
  readonly diameters: readonly number[];
  /** Mean age in years of each material. */
  readonly ages: readonly number[];
  readonly pressureMeanBar: number;
  readonly depthMeanM: number;
  readonly yearsWatched: readonly [number, number];
  /** What sets the utility apart beyond its pipes, on the log scale of the break rate. */
  readonly ownLevel: number;
}

/** An old industrial town, a coast, a fen and a new town: strongly different mixes. */
export const UTILITIES: readonly Utility[] = [
  {
    name: 'harrowmere',
    segments: 6000,
    materials: [0.16, 0.2, 0.56, 0.08],
    soils: [0.08, 0.62, 0.28, 0.02],
    traffic: [0.3, 0.4, 0.3],
    diameters: [0.12, 0.26, 0.24, 0.14, 0.1, 0.07, 0.05, 0.02],
    ages: [17, 31, 74, 52],
    pressureMeanBar: 5.6,
    depthMeanM: 1.25,
    yearsWatched: [8, 12],
    ownLevel: 0.05,
  },
  {
    name: 'lindell-bay',
    segments: 3500,
    materials: [0.44, 0.17, 0.09, 0.3],
    soils: [0.78, 0.06, 0.15, 0.01],
    traffic: [0.55, 0.32, 0.13],
    diameters: [0.2, 0.3, 0.22, 0.12, 0.07, 0.05, 0.03, 0.01],
    ages: [19, 24, 58, 41],
    pressureMeanBar: 4.3,
    depthMeanM: 1.0,
    yearsWatched: [5, 9],
    ownLevel: -0.1,
  },
  {
    name: 'castlefen',
    segments: 1800,
    materials: [0.28, 0.55, 0.14, 0.03],
    soils: [0.05, 0.2, 0.17, 0.58],
    traffic: [0.68, 0.25, 0.07],
    diameters: [0.22, 0.28, 0.2, 0.13, 0.08, 0.05, 0.03, 0.01],
    ages: [14, 29, 63, 47],
    pressureMeanBar: 3.4,
    depthMeanM: 1.1,
    yearsWatched: [4, 8],
    ownLevel: 0.12,
  },
  {
    name: 'oakhythe',
    segments: 700,
    materials: [0.85, 0.11, 0.02, 0.02],
    soils: [0.24, 0.1, 0.64, 0.02],
    traffic: [0.6, 0.3, 0.1],
    diameters: [0.28, 0.34, 0.2, 0.09, 0.05, 0.03, 0.01, 0],
    ages: [10, 16, 48, 30],
    pressureMeanBar: 6.8,
    depthMeanM: 0.95,
    yearsWatched: [3, 6],
    ownLevel: -0.05,
  },
];

/** The same seed gives the same segments; a utility's rows do not depend on the others'. */
export function segmentsOf(utility: Utility, seed: number): Segment[] {
  const random = seededRandom(seed * 1000 + UTILITIES.indexOf(utility));
  return Array.from({ length: utility.segments }, (_, i) => segmentOf(utility, i, random));
}

function segmentOf(utility: Utility, index: number, random: Random): Segment {
  const material = pick(MATERIALS, utility.materials, random);
  const soil = pick(SOILS, utility.soils, random);
  const traffic = pick(TRAFFIC, utility.traffic, random);
  const diameter_mm = pick(DIAMETERS_MM, utility.diameters, random);
  const ageMean = utility.ages[MATERIALS.indexOf(material)];
  const age_years = Math.round(clamp(ageMean * (1 + 0.3 * random.normal()), 1, 120));
  const pressure_bar = rounded(clamp(utility.pressureMeanBar + 1.2 * random.normal(), 1.2, 11), 2);
  const depth_m = rounded(clamp(utility.depthMeanM + 0.22 * random.normal(), 0.5, 2.6), 2);
  const [least, most] = utility.yearsWatched;
  const km_years = rounded((0.06 + 0.45 * random.gamma(1.4)) * (least + random.integer(most - least + 1)), 3);
  const pipe = { age_years, diameter_mm, material, pressure_bar, soil, depth_m, traffic };
  // what no column tells of a segment: breaks scatter more than a Poisson count would
  const hidden = random.gamma(3) / 3;
  const breaks = random.poisson(km_years * Math.exp(logRate(pipe) + utility.ownLevel) * hidden);
  const segment = `${utility.name.slice(0, 2)}-${String(index + 1).padStart(5, '0')}`;
  return { segment, breaks, km_years, ...pipe, broke: breaks > 0 ? 'yes' : 'no' };
}

type Pipe = Omit<Segment, 'segment' | 'breaks' | 'km_years' | 'broke'>;

/** Logarithm of the breaks per kilometre-year that the invented world has on average. */
function logRate(pipe: Pipe): number {
  const material = { pvc: -0.9, 'ductile-iron': -0.55, 'cast-iron': 0.1, steel: -0.2 }[pipe.material];
  const ageing = { pvc: 0.006, 'ductile-iron': 0.012, 'cast-iron': 0.015, steel: 0.019 }[pipe.material];
  const soil = { sand: 0, clay: 0.32, loam: 0.08, peat: 0.47 }[pipe.soil];
  const traffic = { light: 0, medium: 0.06, heavy: 0.17 }[pipe.traffic];
  return (
    -2.35 +
    material +
    soil +
    traffic +
    ageing * (pipe.age_years - 30) -
    0.6 * Math.log(pipe.diameter_mm / 150) +
    0.07 * (pipe.pressure_bar - 5) +
    0.018 * (pipe.pressure_bar - 5) ** 2 -
    0.18 * (pipe.depth_m - 1.1)
  );
}

function pick<T>(choices: readonly T[], shares: readonly number[], random: Random): T {
  let left = random.uniform();
  for (let i = 0; i < choices.length - 1; i++) {
    left -= shares[i];
    if (left < 0) return choices[i];
  }
  return choices[choices.length - 1];
}

const clamp = (value: number, least: number, most: number): number => Math.min(Math.max(value, least), most);

const rounded = (value: number, digits: number): number => Number(value.toFixed(digits));
