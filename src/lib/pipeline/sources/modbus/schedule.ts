// Pure.
/** Rounds of one interval on a monotonic clock: in phase, and what cannot be kept is skipped and counted, never caught up. */
export interface Rounds {
	intervalMs: number;
	/** Next round, monotonic milliseconds. */
	nextAt: number;
	skipped: number;
}

/** A round that is due at once, then in phase. */
export function startRounds(intervalMs: number, now: number): Rounds {
	return { intervalMs, nextAt: now, skipped: 0 };
}

/** The rounds after one that was due: the next in phase that still lies ahead. */
export function afterRound(rounds: Rounds, now: number): Rounds {
	const behind = Math.max(0, Math.floor((now - rounds.nextAt) / rounds.intervalMs));
	return { ...rounds, nextAt: rounds.nextAt + (behind + 1) * rounds.intervalMs, skipped: rounds.skipped + behind };
}
