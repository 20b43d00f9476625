// Edge: store. May touch: pool; readings, the feed's journal, roll-ups and their progress.
import type { Client, Pool } from '#lib/server/db/pool.ts';
import { inTransaction } from '#lib/server/db/transaction.ts';
import { readJournal } from './find-feed.ts';
import { visitPacked } from './journal-codec.ts';
import { ensureRollupMonth } from './partitions.ts';
import { rollUpStatement, WIDEN_STATEMENT } from './roll-up-sql.ts';

const MINUTE_MS = 60_000;
const HOUR_MS = 3_600_000;
const DAY_MS = 86_400_000;
/** Most places of the journal of one step: it bounds the memory and the length of the transaction. */
const STEP = 200_000;
/** Stretches of one statement, each of an hour at most: 360,000 readings of tags that come every second. */
const CHUNK = 100;
/** Readers take the newest minutes from the readings themselves: some of these are still on their way while a step looks. */
const SETTLES_MS = 2 * MINUTE_MS;

/** A stretch of one tag, [from, to), ms. */
export interface Stretch {
	tagId: number;
	from: number;
	to: number;
}

/** How far a site's roll-ups are: all that the journal says up to `position` is in them; hours before `closed_until` are made when touched. */
interface Progress {
	site_id: number;
	position: number;
	closed_until: Date;
	backfill_day: string | null;
	backfill_until: string | null;
}

/**
 * Brings every site's roll-ups up to what is stored. The feed's journal says what came since the last step, late and out of order or not: each
 * reading has the buckets it touches made again from the readings themselves, so that the rows do not depend on the order of arrival.
 * One worker a site at a time. Answers true while there is more to do.
 */
export async function rollUpSites(pool: Pool, now: number): Promise<boolean> {
	const sites = await pool.query<{ id: number }>('SELECT id FROM sites ORDER BY id');
	let isBehind = false;
	for (const { id } of sites.rows) if (await rollUpSite(pool, id, now)) isBehind = true;
	return isBehind;
}

async function rollUpSite(pool: Pool, siteId: number, now: number): Promise<boolean> {
	return inTransaction(pool, async (_, client) => {
		await client.query('SET LOCAL statement_timeout = 0');
		const progress = await takeProgress(client, siteId, now);
		if (!progress) return false;
		const head = await client.query<{ position: number; oldest: number }>(
			'SELECT position, oldest FROM feed_heads WHERE site_id = $1',
			[siteId],
		);
		const { position = 0, oldest = 0 } = head.rows[0] ?? {};
		if (progress.position < oldest) {
			// The journal no longer holds what came since: those days are made again whole.
			await beginBackfill(client, siteId, oldest, now);
			return true;
		}
		if (progress.backfill_day !== null) await backfillDay(client, progress);
		const until = Math.min(position, progress.position + STEP);
		const touched = await readTouched(pool, siteId, progress.position, until);
		const minutes = mergeStretches((await widen(client, touched)).map((one) => toBuckets(one, MINUTE_MS)));
		await write(client, 'rollups_minute', minutes);
		const thisHour = Math.floor(now / HOUR_MS) * HOUR_MS;
		const hours = mergeStretches([
			...minutes.map((one) => toBuckets({ ...one, to: one.to - 1 }, HOUR_MS)),
			...(await listClosing(client, siteId, progress.closed_until.getTime(), thisHour)),
		])
			.map((one) => ({ ...one, to: Math.min(one.to, thisHour) }))
			.filter((one) => one.to > one.from);
		await write(client, 'rollups_hour', hours);
		// Readers go by roll-ups up to `minute_until`, and by the readings themselves while these are behind.
		const isBehind = until < position || progress.backfill_day !== null;
		await client.query(
			'UPDATE rollup_progress SET position = $2, closed_until = $3, minute_until = CASE WHEN $4 THEN minute_until ELSE $5 END WHERE site_id = $1',
			[siteId, until, iso(thisHour), isBehind, iso(Math.floor((now - SETTLES_MS) / MINUTE_MS) * MINUTE_MS)],
		);
		return isBehind;
	});
}

const iso = (at: number) => new Date(at).toISOString();

async function takeProgress(client: Client, siteId: number, now: number): Promise<Progress | undefined> {
	await client.query(
		`INSERT INTO rollup_progress (site_id, position, minute_until, closed_until) VALUES ($1, 0, '1970-01-01 00:00:00+00', $2) ON CONFLICT DO NOTHING`,
		[siteId, iso(Math.floor(now / HOUR_MS) * HOUR_MS)],
	);
	const found = await client.query<Progress>(
		`SELECT site_id, position, closed_until, backfill_day::text, backfill_until::text FROM rollup_progress WHERE site_id = $1 FOR UPDATE SKIP LOCKED`,
		[siteId],
	);
	return found.rows[0];
}

/** What the journal says was stored in (after, until], as first and last moment a tag and hour. */
async function readTouched(pool: Pool, siteId: number, after: number, until: number): Promise<Stretch[]> {
	const touched = new Map<string, Stretch>();
	let place = after;
	while (place < until) {
		const rows = await readJournal(pool, siteId, place, until);
		if (rows.length === 0) break;
		for (const row of rows) {
			if (row.readings) {
				visitPacked(row.readings, Math.max(0, place - row.first_position + 1), (tagId, at, _value, _quality, flags, index) => {
					if (row.first_position + index > until) return true;
					if (flags.isTest) return false;
					const key = `${tagId} ${Math.floor(at / HOUR_MS)}`;
					const known = touched.get(key);
					if (!known) touched.set(key, { tagId, from: at, to: at });
					else {
						known.from = Math.min(known.from, at);
						known.to = Math.max(known.to, at);
					}
					return false;
				});
			}
			place = row.last_position;
		}
	}
	return [...touched.values()];
}

/** From first and last touched moment to those of the readings beside them. */
async function widen(client: Client, touched: readonly Stretch[]): Promise<Stretch[]> {
	const wide: Stretch[] = [];
	for (let from = 0; from < touched.length; from += CHUNK) {
		const part = touched.slice(from, from + CHUNK);
		const found = await client.query<{ tag_id: number; first: number; last: number }>(WIDEN_STATEMENT, [
			part.map((one) => one.tagId),
			part.map((one) => iso(one.from)),
			part.map((one) => iso(one.to)),
		]);
		wide.push(...found.rows.map((row) => ({ tagId: row.tag_id, from: row.first, to: row.last })));
	}
	return wide;
}

/** The buckets that hold both ends, as a half-open stretch. */
function toBuckets({ tagId, from, to }: Stretch, widthMs: number): Stretch {
	return { tagId, from: Math.floor(from / widthMs) * widthMs, to: Math.floor(to / widthMs) * widthMs + widthMs };
}

/** Joins stretches of one tag that overlap or meet, so that no bucket is made twice in one statement. */
export function mergeStretches(stretches: readonly Stretch[]): Stretch[] {
	const sorted = [...stretches].sort((a, b) => a.tagId - b.tagId || a.from - b.from);
	const merged: Stretch[] = [];
	for (const one of sorted) {
		const last = merged.at(-1);
		if (last && last.tagId === one.tagId && one.from <= last.to) last.to = Math.max(last.to, one.to);
		else merged.push({ ...one });
	}
	return merged;
}

function byHour({ tagId, from, to }: Stretch): Stretch[] {
	const pieces: Stretch[] = [];
	for (let at = from; at < to;) {
		const end = Math.min(to, Math.floor(at / HOUR_MS) * HOUR_MS + HOUR_MS);
		pieces.push({ tagId, from: at, to: end });
		at = end;
	}
	return pieces;
}

/** Tags with readings in hours that have closed since the last step. */
async function listClosing(client: Client, siteId: number, from: number, to: number): Promise<Stretch[]> {
	if (to <= from) return [];
	const found = await client.query<{ tag_id: number }>(
		`SELECT DISTINCT m.tag_id FROM rollups_minute m JOIN tags t ON t.id = m.tag_id WHERE t.site_id = $1 AND m.bucket >= $2 AND m.bucket < $3`,
		[siteId, iso(from), iso(to)],
	);
	return found.rows.map((row) => ({ tagId: row.tag_id, from, to }));
}

async function write(client: Client, table: 'rollups_minute' | 'rollups_hour', stretches: readonly Stretch[]): Promise<void> {
	const pieces = stretches.flatMap(byHour);
	const months = new Set(stretches.flatMap((one) => [iso(one.from).slice(0, 7), iso(one.to).slice(0, 7)]));
	for (const month of months) await ensureRollupMonth(client, Date.parse(`${month}-01T00:00:00Z`));
	for (let from = 0; from < pieces.length; from += CHUNK) {
		const part = pieces.slice(from, from + CHUNK);
		await client.query(rollUpStatement(table), [
			part.map((one) => one.tagId),
			part.map((one) => iso(one.from)),
			part.map((one) => iso(one.to)),
		]);
	}
}

/** A tag's oldest reading or the hour of its oldest block, without opening any. */
const OLDEST = `SELECT least((SELECT min(at) FROM recent_readings WHERE tag_id = t.id), (SELECT min(at) FROM late_readings WHERE tag_id = t.id),
	(SELECT min(hour) FROM reading_blocks WHERE tag_id = t.id AND hour < (SELECT packed_until FROM packing_state))) AS at`;

/** Days from the oldest reading on are made whole, one a step; what comes meanwhile is made by the journal as always. */
async function beginBackfill(client: Client, siteId: number, position: number, now: number): Promise<void> {
	await client.query(
		`UPDATE rollup_progress SET position = $2, minute_until = '1970-01-01 00:00:00+00', backfill_until = $3::timestamptz::date,
			backfill_day = (SELECT min(first.at)::date FROM tags t CROSS JOIN LATERAL (${OLDEST}) first WHERE t.site_id = $1)
		 WHERE site_id = $1`,
		[siteId, position, iso(now)],
	);
}

async function backfillDay(client: Client, progress: Progress): Promise<void> {
	if (progress.backfill_day === null || progress.backfill_until === null) return;
	const from = Date.parse(`${progress.backfill_day}T00:00:00Z`);
	const tags = await client.query<{ id: number }>('SELECT id FROM tags WHERE site_id = $1 ORDER BY id', [progress.site_id]);
	const day = tags.rows.map(({ id }) => ({ tagId: id, from, to: from + DAY_MS }));
	await write(client, 'rollups_minute', day);
	await write(client, 'rollups_hour', day);
	const next = iso(from + DAY_MS).slice(0, 10);
	await client.query(
		'UPDATE rollup_progress SET backfill_day = CASE WHEN $2::date > backfill_until THEN NULL ELSE $2::date END WHERE site_id = $1',
		[progress.site_id, next],
	);
}
