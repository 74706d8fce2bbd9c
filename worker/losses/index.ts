import type { LossName } from '../../protocol/specification/types.js';
import { logistic } from './logistic.js';
import type { Loss } from './loss.js';
import { poisson } from './poisson.js';
import { squared } from './squared.js';

const LOSSES: Readonly<Record<LossName, Loss>> = { squared, logistic, poisson };

export const lossNamed = (name: LossName): Loss => LOSSES[name];
