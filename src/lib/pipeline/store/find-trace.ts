// Edge: store. May touch: pool; latest values, readings, revisions and feed readers, to read.
import type { Pool } from '#lib/server/db/pool.ts';
import type { MapRow } from '#lib/domain/tag-map/row.ts';
import type { Verdict } from '#lib/domain/reading.ts';

/** Everything known of one value's way, from which the hops are laid out. */
export interface TraceFacts {
	tagId: number;
	tag: string;
	unit: string;
	detector: string;
	/** The row of the revision that normalized the value. */
	row: MapRow;
	revision: number;
	at: number;
	receivedAt: number;
	storedAt: number | null;
	sourceAt: number | null;
	isHubTime: boolean;
	value: number | null;
	quality: number;
	reason: string | null;
	/** Raw scalar as text; null where it must be rebuilt by the row's inverse. */
	raw: string | null;
	/** Bytes or payload as captured; null for a stored value, of which none are kept. */
	wire: string | null;
	verdict: Verdict | null;
	isLatest: boolean;
	source: { id: string; name: string; kind: string } | null;
	readers: { name: string; position: number; readAt: number }[];
}

const COLUMNS = 'at, received_at, source_at, is_hub_time, value, quality, reason, raw, revision';
/** The newest of each kind of keeping, and of those the newest; of the blocks only the last that has a reading so early is opened. */
const NEWEST_BEFORE = `
SELECT ${COLUMNS}, NULL::timestamptz AS updated_at, NULL::text AS wire, NULL::text AS verdict FROM (
	(SELECT ${COLUMNS} FROM recent_readings WHERE tag_id = $1 AND at <= $2 ORDER BY at DESC LIMIT 1)
	UNION ALL (SELECT ${COLUMNS} FROM late_readings WHERE tag_id = $1 AND at <= $2 ORDER BY at DESC LIMIT 1)
	UNION ALL (SELECT ${COLUMNS} FROM unpacked_readings WHERE tag_id = $1 AND at <= $2 AND hour = (
		SELECT hour FROM reading_blocks WHERE tag_id = $1 AND hour <= $2 AND hour + first_ms * interval '1 millisecond' <= $2 AND hour < (SELECT packed_until FROM packing_state)
		ORDER BY hour DESC LIMIT 1) ORDER BY at DESC LIMIT 1)) newest
ORDER BY at DESC LIMIT 1`;

/** The facts of a tag's latest value, or of the stored one at or just before `at`; null where there is none. */
export async function findTrace(pool: Pool, tagId: number, at: number | null): Promise<TraceFacts | null> {
	const tag = await pool.query<{
		site_id: number;
		name: string;
		unit: string;
		detector: string;
		row: MapRow;
		source_id: string | null;
		source: string | null;
		kind: string | null;
	}>(
		`SELECT t.site_id, t.name, t.unit, t.detector, t.row, s.id AS source_id, s.name AS source, s.kind FROM tags t LEFT JOIN sources s ON s.id = t.source_id WHERE t.id = $1`,
		[tagId],
	);
	const facts = tag.rows[0];
	if (!facts) return null;
	const found = await pool.query<{
		at: Date;
		received_at: Date;
		updated_at: Date | null;
		source_at: Date | null;
		is_hub_time: boolean;
		value: number | null;
		quality: number;
		reason: string | null;
		raw: string | null;
		wire: string | null;
		verdict: Verdict | null;
		revision: number;
	}>(
		at === null
			? 'SELECT at, received_at, updated_at, source_at, is_hub_time, value, quality, reason, raw, wire, verdict, revision FROM latest WHERE tag_id = $1'
			: NEWEST_BEFORE,
		at === null ? [tagId] : [tagId, new Date(at).toISOString()],
	);
	const value = found.rows[0];
	if (!value) return null;
	const rows = await pool.query<{ row: MapRow }>(
		'SELECT row FROM map_rows WHERE tag_id = $1 AND from_revision <= $2 AND (to_revision IS NULL OR to_revision > $2) LIMIT 1',
		[tagId, value.revision],
	);
	const readers = await pool.query<{ name: string; position: number; read_at: Date }>(
		'SELECT name, position, read_at FROM feed_readers WHERE site_id = $1 ORDER BY read_at DESC LIMIT 20',
		[facts.site_id],
	);
	return {
		tagId,
		tag: facts.name,
		unit: facts.unit,
		detector: facts.detector,
		row: rows.rows[0]?.row ?? facts.row,
		revision: value.revision,
		at: value.at.getTime(),
		receivedAt: value.received_at.getTime(),
		storedAt: value.updated_at?.getTime() ?? null,
		sourceAt: value.source_at?.getTime() ?? null,
		isHubTime: value.is_hub_time,
		value: value.value,
		quality: value.quality >>> 0,
		reason: value.reason,
		raw: value.raw,
		wire: value.wire,
		verdict: value.verdict,
		isLatest: at === null,
		source: facts.source_id && facts.source && facts.kind ? { id: facts.source_id, name: facts.source, kind: facts.kind } : null,
		readers: readers.rows.map((row) => ({ name: row.name, position: row.position, readAt: row.read_at.getTime() })),
	};
}
