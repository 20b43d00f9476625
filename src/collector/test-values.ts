// Edge: collector. Test values that stand, by their persisted deadline. May touch: test-value table; hands test readings to the pipeline.
import type { AlarmDirection, LimitLevel } from '#lib/domain/limit.ts';
import { STATUS_CODES } from '#lib/domain/quality.ts';
import { freshState, judge, type JudgingState } from '#lib/pipeline/evaluate/evaluate.ts';
import type { TagPlan } from '#lib/domain/tag-map/tag-plan.ts';
import type { Pipeline } from '#lib/pipeline/pipeline.ts';
import type { TagAlarmChange } from '#lib/pipeline/store/write-batch.ts';
import type { Pool } from '#lib/server/db/pool.ts';

/** A test value that stands, with what its own judging remembers. */
export interface StandingTest {
	id: number;
	tagId: number;
	value: number;
	until: number;
	judging: JudgingState;
	/** Monotonic. */
	saidAt: number;
}

/** While one stands it is said again this often, so that a receiver which joined late sees it too. */
const AGAIN_MS = 10_000;

export class TestValues {
	readonly #pool: Pool;
	readonly #pipeline: Pipeline;
	readonly #standing = new Map<number, StandingTest>();
	readonly #save: (tests: StandingTest[]) => void;

	/** `save` keeps what stands for a start without the database. */
	constructor(pool: Pool, pipeline: Pipeline, save: (tests: StandingTest[]) => void) {
		this.#pool = pool;
		this.#pipeline = pipeline;
		this.#save = save;
	}

	/** Goes on with what stood when the last run of this collector ended. */
	restore(tests: readonly StandingTest[]): void {
		for (const test of tests) this.#standing.set(test.tagId, { ...test, saidAt: -Infinity });
		this.goOn();
	}

	/** Without the database: what stands is said on, and ends by its deadline all the same. */
	goOn(): void {
		const { now } = this.#pipeline.clock();
		for (const standing of this.#standing.values()) {
			if (standing.until <= now) this.#end(standing);
			else if (performance.now() - standing.saidAt >= AGAIN_MS) this.#say(standing);
		}
	}

	/** Looks what stands now among this collector's tags; true readings go on being stored and judged beside it. */
	async look(): Promise<void> {
		if (this.#pipeline.isDown) {
			this.goOn();
			return;
		}
		const found = await this.#pool.query<{ id: number; tag_id: number; value: number; until: Date }>(
			'SELECT DISTINCT ON (tag_id) id, tag_id, value, until FROM test_values WHERE ended_at IS NULL AND until > clock_timestamp() ORDER BY tag_id, id DESC',
		);
		const now = new Map(found.rows.map((row) => [row.tag_id, row]));
		await this.#clearOrphans();
		for (const [tagId, standing] of this.#standing) if (now.get(tagId)?.id !== standing.id) this.#end(standing);
		for (const row of found.rows) {
			if (!this.#pipeline.tags.has(row.tag_id)) continue;
			const standing = this.#standing.get(row.tag_id) ?? {
				id: row.id,
				tagId: row.tag_id,
				value: row.value,
				until: row.until.getTime(),
				judging: freshState(),
				saidAt: -Infinity,
			};
			this.#standing.set(row.tag_id, standing);
			if (performance.now() - standing.saidAt >= AGAIN_MS) this.#say(standing);
		}
	}

	/** Alarms of tests that ended while no collector ran. */
	async #clearOrphans(): Promise<void> {
		const own = [...this.#pipeline.tags.keys()].filter((tagId) => !this.#standing.has(tagId));
		const left = await this.#pool.query<{ tag_id: number; direction: AlarmDirection; level: LimitLevel; raised_at: Date }>(
			`SELECT tag_id, direction, level, raised_at FROM alarms WHERE is_test AND cleared_at IS NULL AND tag_id = ANY($1::int[])
				AND NOT EXISTS (SELECT FROM test_values v WHERE v.tag_id = alarms.tag_id AND v.ended_at IS NULL AND v.until > clock_timestamp())`,
			[own],
		);
		if (left.rows.length === 0) return;
		this.#pipeline.add((pending, clock) => {
			for (const alarm of left.rows) {
				const tag = this.#pipeline.tags.get(alarm.tag_id);
				if (tag)
					pending.alarmChanges.push(endOfTest(tag.plan, alarm.direction, alarm.level, alarm.raised_at.getTime(), clock.now));
			}
		});
	}

	#say(standing: StandingTest): void {
		const tag = this.#pipeline.tags.get(standing.tagId);
		if (!tag) return;
		standing.saidAt = performance.now();
		this.#pipeline.add((pending, clock) => {
			const { siteId, tagId } = tag.plan;
			const quality = STATUS_CODES.GoodLocalOverride;
			pending.testReadings.push({ siteId, tagId, at: clock.now, value: standing.value, quality });
			const judged = judge(
				{
					tagId,
					at: clock.now,
					value: standing.value,
					quality,
					timeFrom: 'hub',
					receivedAt: clock.now,
					sourceAt: null,
					reason: 'test-value',
					raw: null,
					wire: null,
					revision: tag.plan.revision,
				},
				tag.plan,
				standing.judging,
				{ now: clock.now },
			);
			standing.judging = judged.state;
			for (const change of judged.changes) pending.alarmChanges.push({ ...change, tagId, siteId, isTest: true });
		});
		this.#save([...this.#standing.values()]);
	}

	/** The test is over: alarms that it raised clear with it. */
	#end(standing: StandingTest): void {
		this.#standing.delete(standing.tagId);
		const tag = this.#pipeline.tags.get(standing.tagId);
		if (!tag) return;
		this.#pipeline.add((pending, clock) => {
			for (const [direction, alarm] of Object.entries(standing.judging.open)) {
				if (!alarm) continue;
				pending.alarmChanges.push(endOfTest(tag.plan, direction as AlarmDirection, alarm.level, alarm.raisedAt, clock.now));
			}
		});
		this.#save([...this.#standing.values()]);
	}
}

/** An alarm that a test raised ends with it. */
function endOfTest(plan: TagPlan, direction: AlarmDirection, level: LimitLevel, raisedAt: number, at: number): TagAlarmChange {
	return {
		kind: 'cleared',
		direction,
		limitKind: 'high',
		level,
		levelNow: null,
		at,
		raisedAt,
		value: null,
		isUncertain: false,
		limitId: 0,
		isLate: false,
		isTest: true,
		tagId: plan.tagId,
		siteId: plan.siteId,
	};
}
