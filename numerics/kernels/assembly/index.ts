export { cholesky, solve } from './cholesky';
export { exponentials, logarithms } from './elementary';
export { addGram, packRows } from './gram';
export { multiplyAdd, readMemory } from './limits';
export { curvatures, pass } from './losses';
export { foldIn } from './reflect';
export { addWeightedRows, addWeightedSquares, rowProducts } from './rows';
