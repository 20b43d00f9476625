// Pure.
/** One seed for the plant everywhere, so that the numbers are the same after every start. */
export const DEMO_SEED = 1_485;
