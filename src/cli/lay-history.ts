// Edge: cli. May touch: the store, the demo's data. A day that the invented plant has behind it, judged and stored as the collector would have.
import type { TagPlan } from '#lib/domain/tag-map/tag-plan.ts';
import { loadPlans } from '../collector/load-plans.ts';
import { judge, type JudgingState } from '#lib/pipeline/evaluate/evaluate.ts';
import { rawToStore, rebuildRaw } from '#lib/pipeline/normalize/raw-to-store.ts';
import { createCopyWriter } from '#lib/pipeline/store/copy-writer.ts';
import { ensureJournalDay, ensureReadingDay } from '#lib/pipeline/store/partitions.ts';
import { EMPTY_BATCH, type StoredReading, type TagAlarmChange } from '#lib/pipeline/store/write-batch.ts';
import { acknowledgeAlarm } from '#lib/server/alarms/acknowledge.ts';
import type { Pool } from '#lib/server/db/pool.ts';
import { createPlant, type Plant } from '#simulators/scenario/plant.ts';
import { DEMO_SEED } from '#simulators/scenario/seed.ts';
import type { Signal } from '#simulators/scenario/parts.ts';

const DAY_MS = 86_400_000;
const BATCH = 10_000;
/** Wired values come every 5 s and would be four fifths of the day without telling more. */
const LEAST_PERIOD_MS = 60_000;

/** Fills the day before `now` for every published tag of the demo's battery sensors; alarms that ended in it are acknowledged. */
export async function layHistory(pool: Pool, now: number): Promise<void> {
	const sources = await pool.query<{ id: string }>('SELECT id FROM sources WHERE deleted_at IS NULL');
	const loaded = await loadPlans(
		pool,
		sources.rows.map((row) => row.id),
	);
	const plant = createPlant(DEMO_SEED);
	await ensureJournalDay(pool, now);
	for (const day of [now - DAY_MS, now]) await ensureReadingDay(pool, day);
	const writer = createCopyWriter(pool, { now: () => now });
	let readings: StoredReading[] = [];
	let alarmChanges: TagAlarmChange[] = [];
	const states = new Map<number, JudgingState>();
	const flush = async () => {
		const judgingStates = [...states].map(([tagId, state]) => ({ tagId, state }));
		await writer.write({ ...EMPTY_BATCH, readings, alarmChanges, judgingStates });
		readings = [];
		alarmChanges = [];
		states.clear();
	};
	try {
		for (const plan of loaded.flatMap((source) => source.plans)) {
			const signal = plant.signal(plan.tag);
			if (!signal || signal.periodMs < LEAST_PERIOD_MS) continue;
			let state: JudgingState | null = null;
			for (const reading of historyOf(plant, signal, plan, now)) {
				const judged = judge(reading, plan, state, { now });
				state = judged.state;
				readings.push(reading);
				for (const change of judged.changes)
					alarmChanges.push({ ...change, tagId: plan.tagId, siteId: plan.siteId, isTest: false });
			}
			// An excursion that still stands goes on live, in the same alarm.
			if (state) states.set(plan.tagId, state);
			if (readings.length >= BATCH) await flush();
		}
		await flush();
	} finally {
		await writer.close();
	}
	const ended = await pool.query<{ id: number; site_id: number }>(
		'SELECT id, site_id FROM alarms WHERE cleared_at IS NOT NULL AND acknowledged_at IS NULL ORDER BY id',
	);
	for (const { id, site_id: siteId } of ended.rows)
		await acknowledgeAlarm(pool, { siteId, id, note: null, actor: { kind: 'command', name: 'demo' }, ip: null });
}

/** What the sensor measured, in the tag's unit and in the steps of the raw type. */
function* historyOf(plant: Plant, signal: Signal, plan: TagPlan, now: number): Generator<StoredReading> {
	let last = 0;
	for (let at = now - DAY_MS; at < now - signal.periodMs; at += signal.periodMs) {
		const { value: measured, measuredAt, status } = plant.read(signal.path, at);
		if (measured === null || status !== 'good' || measuredAt <= last || measuredAt >= now) continue;
		last = measuredAt;
		const { factor, offset } = plan.conversion;
		const raw = rebuildRaw(measured * factor + offset, plan);
		const value = (raw * plan.scale + plan.offset) * factor + offset;
		yield {
			siteId: plan.siteId,
			tagId: plan.tagId,
			at: measuredAt,
			value,
			quality: 0,
			timeFrom: 'source',
			receivedAt: measuredAt,
			sourceAt: null,
			reason: null,
			raw,
			rawKept: rawToStore(raw, value, plan),
			wire: null,
			revision: plan.revision,
		};
	}
}
