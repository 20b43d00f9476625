// Edge: collector. Which sources run here: leases, published plans, test values, requests of the pages. Wires things; decides nothing.
import { createPipelineJobs, type Jobs } from './jobs.ts';
import { createPacking, type Packing } from './packing.ts';
import type { Pipeline } from '#lib/pipeline/pipeline.ts';
import { longestRawDays } from '#lib/pipeline/store/retention.ts';
import type { Source } from '#lib/pipeline/sources/source.ts';
import type { Pool } from '#lib/server/db/pool.ts';
import { log } from '#lib/server/log.ts';
import { answerRequests } from './answer-requests.ts';
import { beat, HEARTBEAT_MS, releaseLeases, renewLeases, RENEW_MS, type Owner } from './lease.ts';
import { loadMemories, loadPlans, readFingerprint, type SourcePlan } from './load-plans.ts';
import type { SourceCounts } from './source-health.ts';
import { SourceRun } from './source-run.ts';
import { TestValues } from './test-values.ts';

export interface SupervisorOptions {
	pool: Pool;
	pipeline: Pipeline;
	owner: Owner;
	create(plan: SourcePlan, counts: SourceCounts): Promise<Source>;
	now(): number;
	/** Runs before sources open, when what they need on disk may have changed. */
	prepare?(): Promise<void>;
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
	#rate = { at: performance.now(), stored: 0, perS: 0 };

	constructor(options: SupervisorOptions) {
		this.#options = options;
		this.#tests = new TestValues(options.pool, options.pipeline);
		this.#jobs = createPipelineJobs(options.pool, options.now);
		this.#packing = createPacking(options.pool, options.now);
	}

	async #readRawDays(): Promise<void> {
		this.#options.pipeline.rawDays = await longestRawDays(this.#options.pool);
	}

	async start(): Promise<void> {
		await this.#readRawDays().catch(() => undefined);
		await this.#lease();
		await this.look();
		const every = (ms: number, work: () => Promise<void>) => {
			let isBusy = false;
			this.#timers.push(
				setInterval(() => {
					if (isBusy || this.#isStopped) return;
					isBusy = true;
					work()
						.catch((error: Error) => log.warn({ error: error.message }, 'a round of the collector failed and is tried again'))
						.finally(() => (isBusy = false));
				}, ms),
			);
		};
		every(RENEW_MS, () => this.#lease());
		every(HEARTBEAT_MS, () => beat(this.#options.pool, this.#options.owner, this.#stats()));
		every(LOOK_MS, () => this.look());
		every(LOOK_MS, () => this.#tick());
		every(HEALTH_MS, async () => {
			for (const run of this.runs.values()) await run.writeHealth();
		});
		every(LOOK_MS, () => this.#tests.look());
		every(60_000, () => this.#jobs.run());
		every(60_000, () => this.#packing.run());
		every(60_000, () => this.#readRawDays());
		void this.#jobs.run().catch((error: Error) => log.warn({ error: error.message }, 'maintenance failed and is tried again'));
	}

	/** Renews; with the database away what is held is kept, since nobody else can take it either. */
	async #lease(): Promise<void> {
		const held = await renewLeases(this.#options.pool, this.#options.owner);
		const lost = [...this.#held].filter((id) => !held.has(id));
		const won = [...held].filter((id) => !this.#held.has(id));
		this.#held = held;
		// A lease that could not be renewed belongs to somebody else, or the source is off: stop at once.
		for (const id of lost) await this.#drop(id);
		if (won.length > 0) {
			void this.look();
		}
	}

	/** Reads what is published when it changed since; one round at a time, and once more when asked meanwhile. */
	look(): Promise<void> {
		if (this.#looking) {
			this.#lookAgain = true;
			return this.#looking;
		}
		this.#looking = this.#lookOnce()
			.catch((error: Error) => log.warn({ error: error.message }, 'the published map could not be read and is tried again'))
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
				const made = new SourceRun(plan, this.#options);
				this.runs.set(plan.id, made);
				made.start();
			}
		}
	}

	async #drop(id: string): Promise<void> {
		const run = this.runs.get(id);
		if (!run) return;
		this.runs.delete(id);
		await run.stop();
		for (const tag of run.plan.plans) this.#options.pipeline.dropTag(tag.tagId);
	}

	async #tick(): Promise<void> {
		for (const run of this.runs.values()) await run.tick();
	}

	#stats(): Record<string, number> {
		const { counts } = this.#options.pipeline;
		const now = performance.now();
		const seconds = (now - this.#rate.at) / 1_000;
		if (seconds > 0.5) this.#rate = { at: now, stored: counts.stored, perS: (counts.stored - this.#rate.stored) / seconds };
		return {
			...counts,
			readings_per_s: Math.round(this.#rate.perS * 10) / 10,
			sources: this.runs.size,
			tags: this.#options.pipeline.tags.size,
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
		for (const run of this.runs.values()) await run.writeHealth().catch(() => undefined);
		await releaseLeases(this.#options.pool, this.#options.owner).catch(() => undefined);
	}
}
