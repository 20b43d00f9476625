// Edge: cli. May touch: the store. A year of one-minute data against a day of it.
import { ensureRollupMonth } from '#lib/pipeline/store/partitions.ts';
import { findTrend } from '#lib/pipeline/store/find-trend.ts';
import type { Pool } from '#lib/server/db/pool.ts';
import { benchLine, type BenchLine } from './line.ts';

const DAY_MS = 86_400_000;
const YEAR_DAYS = 365;
const POINTS = 500;
const ROUNDS = 5;
const ASKS = 40;

function p95(times: readonly number[]): number {
	return [...times].sort((a, b) => a - b)[Math.floor(times.length * 0.95)] ?? 0;
}

/** Ours: 95th percentile of a one-year trend with 500 points. Reference: that of a day of the same tag, in turn. */
export async function benchTrendGrowth(pool: Pool, tagId: number): Promise<BenchLine> {
	const now = Date.now();
	const year = now - YEAR_DAYS * DAY_MS;
	for (let at = year; at < now + 31 * DAY_MS; at += 28 * DAY_MS) await ensureRollupMonth(pool, at);
	for (const [table, step, width] of [
		['rollups_minute', '1 minute', 60],
		['rollups_hour', '1 hour', 3_600],
	] as const)
		await pool.query(
			`INSERT INTO ${table} (tag_id, bucket, n, good_n, min, max, area, covered_s, last, worst)
			 SELECT $1, b, 60, 60, 1 + sin(extract(epoch FROM b)), 3 + sin(extract(epoch FROM b)), 2.0 * ${width}, ${width}, 2, 0
			 FROM generate_series(date_trunc('hour', $2::timestamptz), date_trunc('hour', $3::timestamptz) - interval '${step}', interval '${step}') AS b ON CONFLICT DO NOTHING`,
			[tagId, new Date(year).toISOString(), new Date(now).toISOString()],
		);
	await pool.query(
		`INSERT INTO rollup_progress (site_id, position, minute_until, closed_until)
		 SELECT site_id, 0, date_trunc('hour', $2::timestamptz), date_trunc('hour', $2::timestamptz) FROM tags WHERE id = $1
		 ON CONFLICT (site_id) DO UPDATE SET minute_until = excluded.minute_until`,
		[tagId, new Date(now).toISOString()],
	);
	await pool.query('ANALYZE rollups_minute');
	await pool.query('ANALYZE rollups_hour');
	const ask = async (days: number) => {
		const started = performance.now();
		const { buckets } = await findTrend(pool, tagId, now - days * DAY_MS, now, POINTS);
		if (buckets.length < 200) throw new Error(`a trend of ${days} days has only ${buckets.length} spans`);
		return performance.now() - started;
	};
	const ours: number[] = [];
	const reference: number[] = [];
	for (let round = 0; round < ROUNDS; round += 1) {
		const lanes: [number[], number[]] = [[], []];
		for (let n = 0; n < ASKS; n += 1) {
			lanes[0].push(await ask(YEAR_DAYS));
			lanes[1].push(await ask(1));
		}
		ours.push(p95(lanes[0]));
		reference.push(p95(lanes[1]));
	}
	return benchLine(
		'trend-growth',
		ours,
		reference,
		'ms',
		`p95 of a one-year trend of one-minute data in ${POINTS} points against a one-day trend of the same tag; goal at most 2`,
	);
}
