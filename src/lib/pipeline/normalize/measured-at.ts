// Pure.
/** Before this nothing is a time: device clocks that never were set stand at 1601, 1970 or their own birth. */
export const EARLIEST_MS = Date.UTC(2000, 0, 1);
/** How far ahead of us a source's clock may be, unless the source says otherwise. */
export const FUTURE_MS = 300_000;

export interface MeasuredAt {
	/** The trusted time, whole milliseconds. */
	at: number;
	timeFrom: 'source' | 'hub';
	/** The source's time where it was given and not trusted. */
	sourceAt: number | null;
	isUntrusted: boolean;
}

/**
 * One trusted time for a sample: the source's, cut to milliseconds, where it lies from the edge of what is kept to a little ahead of now;
 * otherwise the time of receipt with the source's kept beside it. Without any source time, the time of receipt.
 */
export function measuredAt(
	sourceAt: number | null,
	receivedAt: number,
	trust: { now: number; rawEdge: number; futureMs: number },
	policy: 'source' | 'hub' | number,
): MeasuredAt {
	const received = Math.floor(receivedAt);
	if (policy === 'hub' || sourceAt === null)
		return { at: received, timeFrom: 'hub', sourceAt: policy === 'hub' ? null : sourceAt, isUntrusted: false };
	const at = Math.floor(policy === 'source' ? sourceAt : sourceAt + policy * 1_000);
	const isTrusted = Number.isFinite(at) && at >= EARLIEST_MS && at >= trust.rawEdge && at <= trust.now + trust.futureMs;
	if (isTrusted) return { at, timeFrom: 'source', sourceAt: null, isUntrusted: false };
	return { at: received, timeFrom: 'hub', sourceAt: Number.isFinite(at) ? at : null, isUntrusted: true };
}
