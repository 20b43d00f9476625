// Edge: collector. One source while this process owns it: open, addresses, health; again after a loss. Decides nothing about values.
import type { Pipeline } from '#lib/pipeline/pipeline.ts';
import type { Advice, Sample, Source, SourceLink, WantedAddress } from '#lib/pipeline/sources/source.ts';
import { SourceError } from '#lib/pipeline/sources/source.ts';
import type { Pool } from '#lib/server/db/pool.ts';
import { log } from '#lib/server/log.ts';
import type { SourcePlan } from './load-plans.ts';
import { rememberCertificate } from './certificate-store.ts';
import { SourceCounts, type HealthState } from './source-health.ts';

/** Waits between tries: from the first, doubled, to the last, with a quarter of chance so that sources do not knock in step. */
const FIRST_WAIT_MS = 500;
const LAST_WAIT_MS = 30_000;
/** How long a source may be silent at its start before that counts as lost. */
const GRACE_MS = 15_000;

export interface SourceRunOptions {
	pool: Pool;
	pipeline: Pipeline;
	/** Makes the source anew for each run of settings. */
	create(plan: SourcePlan, counts: SourceCounts): Promise<Source>;
	now(): number;
}

export class SourceRun {
	readonly counts: SourceCounts;
	plan: SourcePlan;
	link: SourceLink | null = null;
	state: HealthState = 'waiting';
	advice: Advice | null = null;
	readonly #options: SourceRunOptions;
	readonly #stop = new AbortController();
	#kick: AbortController | null = null;
	#finished: Promise<void> = Promise.resolve();
	#startedMono = performance.now();
	#isAlarmed: boolean | null = null;
	/** Suppressed stale alarms that the connection alarm tells of. */
	#toldSuppressed = 0;
	#linkedMono = 0;
	#temporary: WantedAddress[] = [];
	#temporarySamples: ((sample: Sample) => void) | null = null;

	constructor(plan: SourcePlan, options: SourceRunOptions) {
		this.plan = plan;
		this.#options = options;
		this.counts = new SourceCounts(options.now);
	}

	start(): void {
		this.#finished = this.#loop();
	}

	/** Stops in order: the source hands over what it has taken. */
	async stop(): Promise<void> {
		this.#stop.abort();
		this.#kick?.abort();
		await this.#finished;
	}

	/** Drops the connection and makes it anew. */
	reconnect(): void {
		this.#kick?.abort();
	}

	/** Takes up a new map; what did not change goes on without losing a sample. */
	async setPlan(plan: SourcePlan): Promise<void> {
		this.plan = plan;
		await this.#applyAddresses();
	}

	/** Reads addresses that are not in the map once, over the running connection; keys are negative. */
	async readOnce(addresses: WantedAddress[], waitMs: number): Promise<Map<number, Sample>> {
		const found = new Map<number, Sample>();
		if (!this.link) return found;
		this.#temporary = addresses;
		const enough = new Promise<void>((resolve) => {
			const limit = setTimeout(resolve, waitMs);
			this.#temporarySamples = (sample) => {
				if (!found.has(sample.key)) found.set(sample.key, sample);
				if (found.size >= addresses.length) {
					clearTimeout(limit);
					resolve();
				}
			};
		});
		await this.#applyAddresses();
		await enough;
		this.#temporary = [];
		this.#temporarySamples = null;
		await this.#applyAddresses();
		return found;
	}

	#wanted(): WantedAddress[] {
		return [
			...this.plan.plans.map((plan) => ({ key: plan.tagId, address: plan.address, intervalMs: plan.intervalMs })),
			...this.#temporary,
		];
	}

	async #applyAddresses(): Promise<void> {
		if (!this.link) return;
		try {
			const results = await this.link.setAddresses(this.#wanted());
			const refused = results.filter((result) => !result.ok);
			if (refused.length > 0)
				this.counts.event(
					'warning',
					'addresses-refused',
					`${refused.length} of ${results.length} addresses were not taken: ${refused[0]?.detail ?? ''}`,
				);
		} catch (error) {
			this.counts.event('error', 'addresses-failed', `the addresses could not be set: ${(error as Error).message}`);
			this.#kick?.abort();
		}
	}

	async #loop(): Promise<void> {
		let waitMs = FIRST_WAIT_MS;
		let lastCode = '';
		while (!this.#stop.signal.aborted) {
			const kick = new AbortController();
			this.#kick = kick;
			const signal = AbortSignal.any([this.#stop.signal, kick.signal]);
			const openedAt = performance.now();
			try {
				const source = await this.#options.create(this.plan, this.counts);
				this.link = await source.open((samples) => this.#emit(samples), signal);
				this.counts.subscribedAt = this.#options.now();
				this.#linkedMono = performance.now();
				this.counts.event('note', 'connected', 'the connection stands');
				this.advice = null;
				lastCode = '';
				await this.#applyAddresses();
				await this.link.closed;
				if (!this.#stop.signal.aborted) this.counts.event('warning', 'closed', 'the connection was closed');
			} catch (error) {
				if (this.#stop.signal.aborted) break;
				const advice: Advice =
					error instanceof SourceError
						? error.advice
						: {
								code: 'unexpected',
								text: `The source failed: ${(error as Error).message}`,
								check: 'Check the settings; the log holds the details.',
							};
				if (!(error instanceof SourceError)) log.error({ err: error, source: this.plan.name }, 'a source failed unexpectedly');
				if (error instanceof SourceError && error.certificate) {
					await rememberCertificate(this.#options.pool, this.plan.id, error.certificate).catch((problem: Error) =>
						log.warn({ error: problem.message }, 'a certificate could not be kept'),
					);
				}
				this.advice = advice;
				// Said once a change, not once a try.
				if (advice.code !== lastCode) {
					this.counts.event('error', advice.code, `${advice.text} ${advice.check}`);
					log.warn({ source: this.plan.name, code: advice.code }, 'a source is not connected');
				}
				lastCode = advice.code;
			} finally {
				this.link = null;
			}
			if (this.#stop.signal.aborted) break;
			this.counts.reconnect();
			if (performance.now() - openedAt > 60_000) waitMs = FIRST_WAIT_MS;
			await this.#pause(waitMs * (0.75 + Math.random() * 0.5));
			waitMs = Math.min(waitMs * 2, LAST_WAIT_MS);
			if (this.counts.lastGoodAt !== null && this.#options.now() - this.counts.lastGoodAt < 5_000) waitMs = FIRST_WAIT_MS;
		}
	}

	#pause(ms: number): Promise<void> {
		return new Promise((resolve) => {
			const timer = setTimeout(done, ms);
			const signal = this.#stop.signal;
			function done() {
				clearTimeout(timer);
				signal.removeEventListener('abort', done);
				resolve();
			}
			signal.addEventListener('abort', done);
		});
	}

	async #emit(samples: readonly Sample[]) {
		let own = samples;
		if (this.#temporarySamples) {
			own = samples.filter((sample) => {
				if (sample.key >= 0) return true;
				this.#temporarySamples?.(sample);
				return false;
			});
		}
		// What is dropped is counted by the pipeline, which tells it in this source's log.
		return this.#options.pipeline.accept(own, (isUsable, isDuplicate) => this.counts.sample(isUsable, isDuplicate));
	}

	/** Once a second: who went stale, and how the source stands by the age of good data against what is expected of it. */
	tick(): void {
		const { pipeline } = this.#options;
		this.counts.endMinute();
		const tags = this.plan.plans.flatMap((plan) => pipeline.tags.get(plan.tagId) ?? []);
		const { mono } = pipeline.clock();
		const overdue = tags.filter((tag) => tag.isOverdue(mono));
		const staleBefore = tags.filter((tag) => tag.isStale).length;
		const allSilent = tags.length > 0 && staleBefore + overdue.length === tags.length;
		const isUnderway = this.link === null && mono - this.#startedMono < GRACE_MS && this.counts.lastGoodAt === null;
		const isLost =
			!isUnderway &&
			(allSilent ||
				(this.link === null && this.advice !== null && mono - this.#startedMono >= GRACE_MS && staleBefore + overdue.length > 0));
		if (overdue.length > 0) {
			pipeline.add((pending, clock) => {
				for (const tag of overdue) tag.goStale(clock, pending, isLost || this.link === null);
			});
		}
		// The source is back and this tag is not: its own alarm is no consequence of a lost source any more.
		const left =
			isLost || this.link === null
				? []
				: tags.filter((tag) => tag.isSuppressed && mono - this.#linkedMono > tag.plan.staleAfterS * 1_000);
		if (left.length > 0) pipeline.add((pending) => left.forEach((tag) => tag.raiseStale(pending)));
		const silent = tags.filter((tag) => tag.isStale);
		if (silent.length > 0) pipeline.add((pending, clock) => silent.forEach((tag) => tag.stayStale(clock, pending)));
		const stale = staleBefore + overdue.length;
		const before = this.state;
		if (isLost) this.state = 'lost';
		else if (tags.length > 0 && this.counts.lastGoodAt === null && stale === 0) this.state = 'waiting';
		else if (tags.length === 0)
			this.state = this.link ? 'ok' : this.advice && mono - this.#startedMono >= GRACE_MS ? 'lost' : 'waiting';
		else this.state = stale > 0 ? 'late' : this.link === null && this.advice ? 'late' : 'ok';
		if (before !== this.state)
			this.counts.event(this.state === 'ok' ? 'note' : 'warning', `state-${this.state}`, WORDS[this.state]);
		this.#connectionAlarm(tags.filter((tag) => tag.isSuppressed).length);
	}

	/** One connection alarm for a lost source; raised again after a restart it stays the same one. */
	#connectionAlarm(suppressed: number): void {
		const { pipeline } = this.#options;
		const tell = (kind: 'lost' | 'back') =>
			pipeline.add((pending, { now }) =>
				pending.connections.push({
					kind,
					sourceId: this.plan.id,
					siteId: this.plan.siteId,
					source: this.plan.name,
					at: now,
					suppressed,
				}),
			);
		if (this.state === 'lost' && (this.#isAlarmed !== true || suppressed > this.#toldSuppressed)) {
			tell('lost');
			this.#isAlarmed = true;
			this.#toldSuppressed = suppressed;
		} else if ((this.state === 'ok' || this.state === 'late') && this.#isAlarmed !== false && this.counts.lastGoodAt !== null) {
			tell('back');
			this.#isAlarmed = false;
			this.#toldSuppressed = 0;
		}
	}

	async writeHealth(): Promise<void> {
		const tags = this.plan.plans.flatMap((plan) => this.#options.pipeline.tags.get(plan.tagId) ?? []);
		await this.counts.write(this.#options.pool, {
			id: this.plan.id,
			state: this.state,
			advice: this.advice ?? this.link?.advice ?? null,
			tags: tags.length,
			staleTags: tags.filter((tag) => tag.isStale).length,
		});
	}
}

const WORDS: Record<HealthState, string> = {
	ok: 'all tags have values in time',
	late: 'some tags are stale',
	lost: 'no tag has a value in time',
	waiting: 'waiting for the first value',
	off: 'switched off',
};
