/** Largest size of a value that enters the arithmetic: its square, summed over all rows and multiplied by another, stays finite. */
export const VALUE_MOST = 1e70;

/** Largest size of an offset: exp(offset), summed over all rows, stays finite. */
export const OFFSET_MOST = 300;
