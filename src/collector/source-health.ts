// Edge: collector. What one source's run counts, and what is written of it. May touch: source health, event, exchange and minute tables.
import type { Advice, Exchange, SourceObserver } from '#lib/pipeline/sources/source.ts';
import { ensureExchangeDay } from '#lib/pipeline/store/partitions.ts';
import type { Pool } from '#lib/server/db/pool.ts';

const DAY_MS = 86_400_000;

export type HealthState = 'ok' | 'late' | 'lost' | 'waiting' | 'off';

/** Latencies kept for p50 and p95. */
const LATENCIES = 512;
/** Exchanges kept in memory; handed over around a failure. */
const EXCHANGES = 20;
/** At most this many exchanges a source are written each time, so that a storm of failures fills no disk. */
const MOST_WRITTEN = 40;
/** Events and minutes that wait while the database is away: a night's worth of an unsteady source, two days of minutes. */
const MOST_EVENTS = 1_000;
const MOST_MINUTES = 2_880;

interface SourceEvent {
	at: number;
	level: 'note' | 'warning' | 'error';
	code: string;
	text: string;
}

interface Minute {
	good: number;
	bad: number;
	requests: number;
	failures: number;
	reconnects: number;
}
const emptyMinute = (): Minute => ({ good: 0, bad: 0, requests: 0, failures: 0, reconnects: 0 });

/** Counts of one source since this owner took it, and what waits to be written. */
export class SourceCounts implements SourceObserver {
	good = 0;
	bad = 0;
	duplicates = 0;
	requests = 0;
	failures = 0;
	reconnects = 0;
	clockSkewMs: number | null = null;
	lastGoodAt: number | null = null;
	subscribedAt: number | null = null;
	readonly #now: () => number;
	#latencies: number[] = [];
	#events: SourceEvent[] = [];
	#eventsLost = 0;
	#ring: Exchange[] = [];
	#toWrite: Exchange[] = [];
	#afterFailure = 0;
	#minute = emptyMinute();
	#minuteAt = 0;
	#doneMinutes: { at: number; minute: Minute; p50: number | null; p95: number | null }[] = [];
	#written = { good: 0, bad: 0, requests: 0, failures: 0, reconnects: 0, duplicates: 0 };

	constructor(now: () => number) {
		this.#now = now;
	}

	event(level: 'note' | 'warning' | 'error', code: string, text: string): void {
		this.#events.push({ at: this.#now(), level, code, text });
		if (this.#events.length <= MOST_EVENTS) return;
		this.#events.shift();
		this.#eventsLost += 1;
	}

	exchange(exchange: Exchange): void {
		if (exchange.failed) {
			this.#toWrite.push(...this.#ring, exchange);
			this.#ring = [];
			this.#afterFailure = 2;
		} else if (this.#afterFailure > 0) {
			this.#afterFailure -= 1;
			this.#toWrite.push(exchange);
		} else {
			this.#ring.push(exchange);
			if (this.#ring.length > EXCHANGES) this.#ring.shift();
		}
		if (this.#toWrite.length > MOST_WRITTEN) this.#toWrite.splice(0, this.#toWrite.length - MOST_WRITTEN);
	}

	request(worked: boolean, ms: number): void {
		this.requests += 1;
		this.#minute.requests += 1;
		if (!worked) {
			this.failures += 1;
			this.#minute.failures += 1;
			return;
		}
		this.#latencies.push(ms);
		if (this.#latencies.length > LATENCIES) this.#latencies.splice(0, this.#latencies.length - LATENCIES);
	}

	clockSkew(ms: number): void {
		this.clockSkewMs = ms;
	}

	sample(isUsable: boolean, isDuplicate: boolean): void {
		if (isDuplicate) this.duplicates += 1;
		if (isUsable) {
			this.good += 1;
			this.#minute.good += 1;
			this.lastGoodAt = this.#now();
		} else {
			this.bad += 1;
			this.#minute.bad += 1;
		}
	}

	reconnect(): void {
		this.reconnects += 1;
		this.#minute.reconnects += 1;
	}

	percentile(p: number): number | null {
		if (this.#latencies.length === 0) return null;
		const sorted = [...this.#latencies].sort((a, b) => a - b);
		return sorted[Math.min(sorted.length - 1, Math.floor(p * sorted.length))] ?? null;
	}

	/** Writes what stands and what is new. Counters go on from what earlier owners wrote. */
	async write(
		pool: Pool,
		source: { id: string; state: HealthState; advice: Advice | null; tags: number; staleTags: number },
	): Promise<void> {
		const iso = (at: number | null) => (at === null ? null : new Date(at).toISOString());
		const now = {
			good: this.good,
			bad: this.bad,
			requests: this.requests,
			failures: this.failures,
			reconnects: this.reconnects,
			duplicates: this.duplicates,
		};
		const plus = (key: keyof typeof now) => now[key] - this.#written[key];
		await pool.query(
			`INSERT INTO source_health AS h (source_id, state, since, advice, last_good_at, subscribed_at, good, bad, duplicates, requests, failures, reconnects, tags, stale_tags,
				latency_p50_ms, latency_p95_ms, clock_skew_ms, updated_at)
			 VALUES ($1, $2, now(), $3, $4, $5, $6, $7, $8, $9, $10, $11, $12, $13, $14, $15, $16, now())
			 ON CONFLICT (source_id) DO UPDATE SET state = $2, since = CASE WHEN h.state = $2 THEN h.since ELSE now() END, advice = $3,
				last_good_at = coalesce($4, h.last_good_at), subscribed_at = $5, good = h.good + $6, bad = h.bad + $7, duplicates = h.duplicates + $8,
				requests = h.requests + $9, failures = h.failures + $10, reconnects = h.reconnects + $11, tags = $12, stale_tags = $13,
				latency_p50_ms = $14, latency_p95_ms = $15, clock_skew_ms = $16, updated_at = now()`,
			[
				source.id,
				source.state,
				source.advice ? JSON.stringify(source.advice) : null,
				iso(this.lastGoodAt),
				iso(this.subscribedAt),
				plus('good'),
				plus('bad'),
				plus('duplicates'),
				plus('requests'),
				plus('failures'),
				plus('reconnects'),
				source.tags,
				source.staleTags,
				this.percentile(0.5),
				this.percentile(0.95),
				this.clockSkewMs,
			],
		);
		this.#written = now;
		// What waits goes only once it is written: an insert that failed is tried again.
		const events = [...this.#events];
		const lost = this.#eventsLost;
		if (lost > 0 && events[0])
			events.unshift({ ...events[0], level: 'warning', code: 'events-lost', text: `${lost} earlier events could not be kept` });
		if (events.length > 0) {
			await pool.query(
				`INSERT INTO source_events (source_id, at, level, code, text) SELECT $1, g.at, g.level, g.code, g.text
				 FROM unnest($2::timestamptz[], $3::text[], $4::text[], $5::text[]) AS g(at, level, code, text)`,
				[
					source.id,
					events.map((one) => iso(one.at)),
					events.map((one) => one.level),
					events.map((one) => one.code),
					events.map((one) => one.text),
				],
			);
			const written = new Set(events);
			this.#events = this.#events.filter((one) => !written.has(one));
			this.#eventsLost -= lost;
		}
		const exchanges = [...this.#toWrite];
		if (exchanges.length > 0) {
			// Failures are rare, so their day is asked for each time rather than relied on.
			for (const day of new Set(exchanges.map((one) => Math.floor(one.at / DAY_MS)))) await ensureExchangeDay(pool, day * DAY_MS);
			await pool.query(
				`INSERT INTO source_exchanges (source_id, at, direction, bytes, meaning, failed) SELECT $1, g.at, g.direction, g.bytes, g.meaning, g.failed
				 FROM unnest($2::timestamptz[], $3::text[], $4::text[], $5::text[], $6::bool[]) AS g(at, direction, bytes, meaning, failed)`,
				[
					source.id,
					exchanges.map((one) => iso(one.at)),
					exchanges.map((one) => one.direction),
					exchanges.map((one) => one.bytes.slice(0, 2_000)),
					exchanges.map((one) => one.meaning),
					exchanges.map((one) => one.failed),
				],
			);
			const written = new Set(exchanges);
			this.#toWrite = this.#toWrite.filter((one) => !written.has(one));
		}
		await this.#writeMinutes(pool, source.id);
	}

	/** Ends a minute that is over, so that what comes later counts to its own, whether or not the database is there. */
	endMinute(): void {
		const minute = Math.floor(this.#now() / 60_000) * 60_000;
		if (this.#minuteAt === 0) this.#minuteAt = minute;
		if (minute === this.#minuteAt) return;
		this.#doneMinutes.push({ at: this.#minuteAt, minute: this.#minute, p50: this.percentile(0.5), p95: this.percentile(0.95) });
		if (this.#doneMinutes.length > MOST_MINUTES) this.#doneMinutes.shift();
		this.#minute = emptyMinute();
		this.#minuteAt = minute;
	}

	async #writeMinutes(pool: Pool, sourceId: string): Promise<void> {
		this.endMinute();
		for (let done = this.#doneMinutes[0]; done; done = this.#doneMinutes[0]) {
			const { at, minute, p50, p95 } = done;
			await pool.query(
				`INSERT INTO source_minutes AS m (source_id, minute, good, bad, requests, failures, reconnects, latency_p50_ms, latency_p95_ms) VALUES ($1, $2, $3, $4, $5, $6, $7, $8, $9)
				 ON CONFLICT (source_id, minute) DO UPDATE SET good = m.good + excluded.good, bad = m.bad + excluded.bad, requests = m.requests + excluded.requests,
					failures = m.failures + excluded.failures, reconnects = m.reconnects + excluded.reconnects`,
				[
					sourceId,
					new Date(at).toISOString(),
					minute.good,
					minute.bad,
					minute.requests,
					minute.failures,
					minute.reconnects,
					p50,
					p95,
				],
			);
			if (this.#doneMinutes[0] === done) this.#doneMinutes.shift();
		}
	}
}
