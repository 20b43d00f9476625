// Pure.
/** Two time-outs in a row and a unit is asked rarely, so that it does not hold up the others behind its gateway. */
const TIMEOUTS_TO_TRIP = 2;
const FIRST_PROBE_MS = 5_000;
const LAST_PROBE_MS = 30_000;

interface UnitState {
	timeouts: number;
	probeAt: number;
	waitMs: number;
}

/** Which units of a connection are asked now. Times are monotonic milliseconds. */
export class UnitBreaker {
	readonly #units = new Map<number, UnitState>();
	readonly #pausedUntil = new Map<number, number>();

	/** True when the unit should be asked. */
	allows(unitId: number, now: number): boolean {
		if (now < (this.#pausedUntil.get(unitId) ?? -Infinity)) return false;
		const state = this.#units.get(unitId);
		return !state || state.timeouts < TIMEOUTS_TO_TRIP || now >= state.probeAt;
	}

	answered(unitId: number): boolean {
		return this.#units.delete(unitId);
	}

	/** The unit asked for patience: left alone for a moment, without counting as silent. */
	pause(unitId: number, now: number, ms: number): void {
		this.#pausedUntil.set(unitId, now + ms);
	}

	/** Answers true when this time-out tripped the breaker. */
	timedOut(unitId: number, now: number): boolean {
		const state = this.#units.get(unitId) ?? { timeouts: 0, probeAt: 0, waitMs: FIRST_PROBE_MS / 2 };
		const waitMs = Math.min(state.waitMs * 2, LAST_PROBE_MS);
		const timeouts = state.timeouts + 1;
		this.#units.set(unitId, { timeouts, probeAt: now + waitMs, waitMs: timeouts < TIMEOUTS_TO_TRIP ? state.waitMs : waitMs });
		return timeouts === TIMEOUTS_TO_TRIP;
	}

	/** Units that are not answering. */
	silent(): number[] {
		return [...this.#units].filter(([, state]) => state.timeouts >= TIMEOUTS_TO_TRIP).map(([unit]) => unit);
	}
}
