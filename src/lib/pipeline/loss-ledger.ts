// Edge: pipeline. What was taken and could not be kept, by source and reason, until it is told. No I/O.

/** Why samples or readings were let go. */
export type LossReason =
	/** The spool had reached its limit: new samples are refused. */
	| 'spool-full'
	/** The spool could not be written, and too much waited in memory. */
	| 'queue-full'
	/** Stopped while nothing could be kept. */
	| 'stopped'
	/** Waited in the spool longer than its limit of age. */
	| 'spool-age'
	/** The spool's file, or a row of it, could not be read. */
	| 'spool-broken'
	/** Nothing was sampled: the cache of leases and published rows could not be read. */
	| 'not-sampled'
	/** Changes of alarms that the full spool had no room for either. */
	| 'alarm-changes';

export interface Loss {
	/** Empty where the source is not known any more. */
	sourceId: string;
	reason: LossReason;
	/** From the first to the last, milliseconds since the epoch. */
	from: number;
	to: number;
	count: number;
}

/** Bounded by sources × reasons: what is lost again for the same reason is added up. */
export class LossLedger {
	readonly #losses = new Map<string, Loss>();
	/** Everything counted since the start. */
	total = 0;
	/** Rises with every change. */
	version = 0;

	add(sourceId: string, reason: LossReason, count: number, from: number, to: number = from): void {
		if (count <= 0) return;
		this.total += reason === 'alarm-changes' ? 0 : count;
		this.version += 1;
		const key = `${sourceId} ${reason}`;
		const known = this.#losses.get(key);
		if (!known) this.#losses.set(key, { sourceId, reason, from, to, count });
		else
			this.#losses.set(key, {
				...known,
				from: Math.min(known.from, from),
				to: Math.max(known.to, to),
				count: known.count + count,
			});
	}

	entries(): Loss[] {
		return [...this.#losses.values()];
	}

	/** Strikes out what was told; what came on top meanwhile stays. */
	told(entries: readonly Loss[]): void {
		for (const entry of entries) {
			const key = `${entry.sourceId} ${entry.reason}`;
			const known = this.#losses.get(key);
			if (!known) continue;
			this.version += 1;
			const left = known.count - entry.count;
			if (left <= 0) this.#losses.delete(key);
			else this.#losses.set(key, { ...known, from: entry.to, count: left });
		}
	}
}
