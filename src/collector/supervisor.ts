// Edge: collector. Which sources run here: leases, published plans, test values, requests of the pages. Wires things; decides nothing.
import { createPipelineJobs, type Jobs } from './jobs.ts';
import { createPacking, type Packing } from './packing.ts';
import type { Pipeline } from '#lib/pipeline/pipeline.ts';
import { longestRawDays } from '#lib/pipeline/store/retention.ts';
import type { Source } from '#lib/pipeline/sources/source.ts';
import type { Pool } from '#lib/server/db/pool.ts';
import { log } from '#lib/server/log.ts';
import type { TagMemory } from '#lib/pipeline/tag-runtime.ts';
import { answerRequests } from './answer-requests.ts';
import type { CollectorCache } from './cache.ts';
import { beat, HEARTBEAT_MS, readOwnLeases, releaseLeases, renewLeases, RENEW_MS, type Owner } from './lease.ts';
import { loadMemories, loadPlans, readFingerprint, type SourcePlan } from './load-plans.ts';
import type { SourceCounts } from './source-health.ts';
import { SourceRun } from './source-run.ts';
import { tellLosses } from './tell-losses.ts';
import { TestValues } from './test-values.ts';

export interface SupervisorOptions {
	pool: Pool;
	pipeline: Pipeline;
	owner: Owner;
	create(plan: SourcePlan, counts: SourceCounts): Promise<Source>;
	now(): number;
	/** Runs before sources open, when what they need on disk may have changed. */
	prepare?(): Promise<void>;
	/** Makes this run known; asked once, as soon as the database answers. */
	register?(): Promise<void>;
	/** What a start without the database goes on from. */
	cache?: CollectorCache;
}

const LOOK_MS = 1_000;
const HEALTH_MS = 2_000;
/** How long sources may take to hand over what they took before the pipeline closes all the same. */
const STOP_MS = 3_000;

export class Supervisor {
	readonly runs = new Map<string, SourceRun>();
	readonly #options: SupervisorOptions;
	readonly #tests: TestValues;
	readonly #jobs: Jobs;
	readonly #packing: Packing;
	#held = new Set<string>();
	#fingerprint = '';
	#timers: NodeJS.Timeout[] = [];
	#isStopped = false;
	#looking: Promise<void> | null = null;
	#lookAgain = false;
	#isRegistered = false;
	/** Since when nothing is sampled for want of a cache, and the sources that were held then. */
	#unsampled: { since: number; held: string[] | null } | null = null;
	#rate = { at: performance.now(), stored: 0, perS: 0 };

	constructor(options: SupervisorOptions) {
		this.#options = options;
		this.#tests = new TestValues(options.pool, options.pipeline, (tests) => options.cache?.save('tests', tests));
		this.#jobs = createPipelineJobs(options.pool, options.now);
		this.#packing = createPacking(options.pool, options.now);
	}

	async #readRawDays(): Promise<void> {
		this.#options.pipeline.rawDays = await longestRawDays(this.#options.pool);
	}

	async start(): Promise<void> {
		const { pool, pipeline, owner } = this.#options;
		await this.#readRawDays().catch(() => undefined);
		const isThere = await pipeline.begin(() => this.#lease());
		if (isThere) await this.look();
		else this.#goOnFromCache();
		const every = (ms: number, work: () => Promise<void> | void) => {
			let isBusy = false;
			const round = async () => {
				if (isBusy || this.#isStopped) return;
				isBusy = true;
				try {
					await work();
				} catch (error) {
					this.#tryAgain(error as Error, 'a round of the collector failed and is tried again');
				} finally {
					isBusy = false;
				}
			};
			this.#timers.push(setInterval(() => void round(), ms));
		};
		every(RENEW_MS, () => this.#lease());
		every(HEARTBEAT_MS, () => beat(pool, owner, this.#stats()));
		every(LOOK_MS, () => this.look());
		every(LOOK_MS, () => this.#tick());
		every(HEALTH_MS, async () => {
			for (const run of this.runs.values()) await run.writeHealth();
		});
		every(HEALTH_MS, () => this.#tellLosses());
		every(LOOK_MS, () => this.#tests.look());
		every(60_000, () => this.#jobs.run());
		every(60_000, () => this.#packing.run());
		every(60_000, () => this.#readRawDays());
		every(60_000, () => pipeline.spool?.keepWithin());
		void this.#jobs.run().catch((error: Error) => this.#tryAgain(error, 'maintenance failed and is tried again'));
	}

	/** While the database is away its absence is said by the pipeline, not by everybody who asks it. */
	#tryAgain(error: Error, text: string): void {
		log[this.#options.pipeline.isDown ? 'debug' : 'warn']({ error: error.message }, text);
	}

	/** The database is away at the start: what was held is sampled on, into the spool. Nobody else can take it without the database either. */
	#goOnFromCache(): void {
		const { cache, pipeline, now } = this.#options;
		const plans = cache?.read('plans');
		if (!plans || cache?.problem) {
			this.#unsampled = { since: now(), held: null };
			const text = 'the database is away, and there is no cache to go on from: nothing is sampled, which is counted as lost';
			log.error({ problem: cache?.problem ?? 'nothing is in it' }, text);
			return;
		}
		const memories = cache?.memories() ?? new Map<number, TagMemory>();
		for (const { tagId, judging, latest } of pipeline.spool?.tags().tags ?? []) {
			const known = memories.get(tagId);
			memories.set(tagId, { judging: judging ?? known?.judging ?? null, latest: latest ?? known?.latest ?? null });
		}
		this.#held = new Set(plans.map((plan) => plan.id));
		for (const plan of plans) {
			for (const tag of plan.plans) pipeline.setTag(tag, memories.get(tag.tagId) ?? { judging: null, latest: null });
			this.#run(plan);
		}
		this.#tests.restore(cache?.read('tests') ?? []);
		log.warn(
			{ sources: plans.length, tags: pipeline.tags.size },
			'the database is away: sources run from the cache, into the spool',
		);
	}

	#run(plan: SourcePlan): void {
		const made = new SourceRun(plan, this.#options);
		this.runs.set(plan.id, made);
		made.start();
	}

	/** Renews; with the database away what is held is kept, since nobody else can take it either. */
	async #lease(): Promise<void> {
		const { pool, owner, pipeline, register } = this.#options;
		if (!this.#isRegistered) await register?.();
		this.#isRegistered = true;
		const { spool } = pipeline;
		const isAsked = spool?.hasChanges || spool?.hasTags || this.#unsampled;
		const own = isAsked ? await readOwnLeases(pool, owner) : null;
		const held = await renewLeases(pool, owner);
		const lost = [...this.#held].filter((id) => !held.has(id));
		const won = [...held].filter((id) => !this.#held.has(id));
		this.#held = held;
		// A lease that could not be renewed belongs to somebody else, or the source is off: stop at once.
		for (const id of lost) await this.#drop(id);
		if (own) {
			const foreign = spool?.judgedSources().filter((id) => !own.has(id) || !held.has(id)) ?? [];
			if (foreign.length > 0) spool?.disown(foreign);
			if (this.#unsampled) this.#unsampled.held ??= [...own].filter(([id, { mine }]) => mine && held.has(id)).map(([id]) => id);
		}
		if (won.length > 0) {
			void this.look();
		}
	}

	async #tellLosses(): Promise<void> {
		const { pool, pipeline } = this.#options;
		if (pipeline.isDown) return;
		if (await tellLosses(pool, pipeline.losses)) pipeline.spool?.keepWithin();
	}

	/** Reads what is published when it changed since; one round at a time, and once more when asked meanwhile. */
	look(): Promise<void> {
		if (this.#looking) {
			this.#lookAgain = true;
			return this.#looking;
		}
		this.#looking = this.#lookOnce()
			.catch((error: Error) => this.#tryAgain(error, 'the published map could not be read and is tried again'))
			.finally(() => {
				this.#looking = null;
				if (this.#lookAgain && !this.#isStopped) {
					this.#lookAgain = false;
					void this.look();
				}
			});
		return this.#looking;
	}

	async #lookOnce(): Promise<void> {
		const { pool } = this.#options;
		// What is held counts too: a lease may be won while a round is under way.
		const held = [...this.#held].sort();
		const fingerprint = `${await readFingerprint(pool)} ${held.join(' ')}`;
		if (fingerprint !== this.#fingerprint) {
			await this.#options.prepare?.();
			const plans = await loadPlans(pool, held);
			await this.#apply(plans);
			this.#countUnsampled(held);
			this.#fingerprint = fingerprint;
		}
		await answerRequests(pool, this.runs);
	}

	async #apply(plans: readonly SourcePlan[]): Promise<void> {
		const { pool, pipeline } = this.#options;
		const wanted = new Set(plans.map((plan) => plan.id));
		// A tag that moved to another source of ours is kept, whichever of the two comes first.
		const kept = new Set(plans.flatMap((plan) => plan.plans.map((tag) => tag.tagId)));
		for (const id of [...this.runs.keys()]) if (!wanted.has(id)) await this.#drop(id);
		const fresh = plans.flatMap((plan) => plan.plans.filter((tag) => !pipeline.tags.has(tag.tagId)).map((tag) => tag.tagId));
		const memories = await loadMemories(pool, fresh);
		for (const plan of plans) {
			if (this.#isStopped) return;
			// Lost while the plans were read: it is somebody else's now.
			if (!this.#held.has(plan.id)) continue;
			const run = this.runs.get(plan.id);
			for (const old of run?.plan.plans ?? []) if (!kept.has(old.tagId)) pipeline.dropTag(old.tagId);
			for (const tag of plan.plans) pipeline.setTag(tag, memories.get(tag.tagId) ?? { judging: null, latest: null });
			if (run && run.plan.version === plan.version) {
				await run.setPlan(plan);
			} else {
				if (run) await run.stop();
				this.#run(plan);
			}
		}
		this.#options.cache?.save(
			'plans',
			[...this.runs.values()].map((run) => run.plan),
		);
	}

	/** What sources that were held all the time should have given while nothing was sampled, by their tags' intervals. */
	#countUnsampled(loaded: readonly string[]): void {
		const { pipeline, now } = this.#options;
		const unsampled = this.#unsampled;
		// A round that began before the leases were won has not loaded them.
		if (!unsampled?.held?.every((id) => loaded.includes(id))) return;
		this.#unsampled = null;
		const ms = now() - unsampled.since;
		for (const id of unsampled.held) {
			const tags = this.runs.get(id)?.plan.plans ?? [];
			const count = tags.reduce((sum, tag) => sum + Math.floor(ms / tag.intervalMs), 0);
			pipeline.losses.add(id, 'not-sampled', Math.max(count, 1), unsampled.since, now());
		}
	}

	async #drop(id: string): Promise<void> {
		const run = this.runs.get(id);
		if (!run) return;
		this.runs.delete(id);
		await run.stop();
		for (const tag of run.plan.plans) this.#options.pipeline.dropTag(tag.tagId);
	}

	#tick(): void {
		for (const run of this.runs.values()) run.tick();
	}

	#stats(): Record<string, number> {
		const { counts, spool } = this.#options.pipeline;
		const state = spool?.state;
		const now = performance.now();
		const seconds = (now - this.#rate.at) / 1_000;
		if (seconds > 0.5) this.#rate = { at: now, stored: counts.stored, perS: (counts.stored - this.#rate.stored) / seconds };
		return {
			...counts,
			readings_per_s: Math.round(this.#rate.perS * 10) / 10,
			sources: this.runs.size,
			tags: this.#options.pipeline.tags.size,
			...(state && {
				spool_readings: state.readings,
				spool_changes: state.changes,
				spool_bytes: state.bytes,
				spool_max_bytes: state.maxBytes,
				spool_oldest_age_s: state.oldestAt === null ? 0 : Math.max(0, Math.round((this.#options.now() - state.oldestAt) / 1_000)),
				spool_max_age_s: Math.round(state.maxAgeMs / 1_000),
				spool_full: state.isFull ? 1 : 0,
			}),
			rss: process.memoryUsage.rss(),
		};
	}

	/** Sources stop, the pipeline drains, leases go back. The caller ends the pool. */
	async stop(): Promise<void> {
		this.#isStopped = true;
		this.#packing.stop();
		for (const timer of this.#timers) clearInterval(timer);
		const stopped = Promise.all([...this.runs.values()].map((run) => run.stop()));
		// A source waits until what it took is stored; with the database away only the pipeline's close ends that wait.
		await Promise.race([stopped, new Promise((resolve) => setTimeout(resolve, STOP_MS).unref())]);
		await this.#options.pipeline.close();
		await Promise.race([stopped, new Promise((resolve) => setTimeout(resolve, STOP_MS).unref())]);
		const { pool, owner, cache } = this.#options;
		await Promise.all([...this.runs.values()].map((run) => run.writeHealth().catch(() => undefined)));
		await this.#tellLosses().catch(() => undefined);
		// Leases that were given back are nothing to go on from.
		await releaseLeases(pool, owner).then(
			() => cache?.save('plans', []),
			() => undefined,
		);
		cache?.close();
	}
}
