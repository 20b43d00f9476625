// Edge: store. May touch: alarm tables, in the caller's transaction.
import type { Client } from '#lib/server/db/pool.ts';
import type { ConnectionChange, FeedEvent, TagAlarmChange } from './write-batch.ts';

const iso = (at: number) => new Date(at).toISOString();

/**
 * Applies alarm changes in their order. Written again after a restart they change nothing: an excursion is known by tag, direction and the moment it was raised.
 */
export async function applyAlarmChanges(client: Client, changes: readonly TagAlarmChange[]): Promise<void> {
	for (const change of changes) {
		switch (change.kind) {
			case 'raised':
				await raise(client, change);
				break;
			case 'found':
				await recordFound(client, change);
				break;
			case 'escalated':
			case 'stepped-down': {
				const moved = await client.query<{ id: number }>(
					`UPDATE alarms SET level = CASE WHEN level = 'danger' OR $5 = 'danger' THEN 'danger' ELSE level END, level_now = $5,
						escalated_at = CASE WHEN $6 AND escalated_at IS NULL THEN $7::timestamptz ELSE escalated_at END,
						limit_id = CASE WHEN $6 THEN coalesce($8::int, limit_id) ELSE limit_id END,
						acknowledged_at = CASE WHEN $6 THEN NULL ELSE acknowledged_at END, acknowledged_by = CASE WHEN $6 THEN NULL ELSE acknowledged_by END
					 WHERE tag_id = $1 AND direction = $2 AND is_test = $3 AND raised_at <= $4 AND cleared_at IS NULL AND level_now IS DISTINCT FROM $5
						AND NOT EXISTS (SELECT FROM alarm_events e WHERE e.alarm_id = alarms.id AND e.at = $7 AND e.kind = $9)
					 RETURNING id`,
					[
						change.tagId,
						change.direction,
						change.isTest,
						iso(change.raisedAt),
						change.levelNow,
						change.kind === 'escalated',
						iso(change.at),
						change.limitId || null,
						change.kind,
					],
				);
				await record(client, moved.rows[0]?.id, change);
				break;
			}
			case 'cleared': {
				const cleared = await client.query<{ id: number }>(
					`UPDATE alarms SET cleared_at = greatest($5::timestamptz, raised_at), level_now = NULL
					 WHERE tag_id = $1 AND direction = $2 AND is_test = $3 AND raised_at <= $4 AND cleared_at IS NULL RETURNING id`,
					[change.tagId, change.direction, change.isTest, iso(change.raisedAt), iso(change.at)],
				);
				await record(client, cleared.rows[0]?.id, change);
				break;
			}
		}
	}
}

async function raise(client: Client, change: TagAlarmChange): Promise<void> {
	const open = await client.query(
		'SELECT 1 FROM alarms WHERE tag_id = $1 AND direction = $2 AND is_test = $3 AND cleared_at IS NULL',
		[change.tagId, change.direction, change.isTest],
	);
	if ((open.rowCount ?? 0) > 0) return;
	await record(client, await insert(client, change, null), change);
}

/** An excursion known only afterwards is recorded closed. Where it touches one that is on record, it is a part of that one and no second. */
async function recordFound(client: Client, change: TagAlarmChange): Promise<void> {
	const same = await client.query(
		`SELECT 1 FROM alarms WHERE tag_id = $1 AND direction = $2 AND is_test = $3
			AND raised_at <= $5::timestamptz AND coalesce(cleared_at, 'infinity') >= $4::timestamptz`,
		[change.tagId, change.direction, change.isTest, iso(change.raisedAt), iso(change.at)],
	);
	if ((same.rowCount ?? 0) > 0) return;
	const id = await insert(client, change, change.at);
	await record(client, id, { ...change, kind: 'raised', at: change.raisedAt });
	await record(client, id, { ...change, kind: 'cleared', value: null });
}

async function insert(client: Client, change: TagAlarmChange, clearedAt: number | null): Promise<number | undefined> {
	const made = await client.query<{ id: number }>(
		`INSERT INTO alarms (site_id, tag_id, direction, kind, level, level_now, raised_value, is_uncertain, is_late, is_test, raised_at, cleared_at, limit_id)
		 SELECT $1, $2, $3, $4, $5, $6, $7, $8, $9, $10, $11::timestamptz, $12::timestamptz, (SELECT id FROM limits WHERE id = $13)
		 ON CONFLICT DO NOTHING RETURNING id`,
		[
			change.siteId,
			change.tagId,
			change.direction,
			change.limitKind,
			change.level,
			clearedAt === null ? change.levelNow : null,
			change.value,
			change.isUncertain,
			change.isLate,
			change.isTest,
			iso(change.raisedAt),
			clearedAt === null ? null : iso(clearedAt),
			change.limitId || null,
		],
	);
	return made.rows[0]?.id;
}

async function record(client: Client, alarmId: number | undefined, change: TagAlarmChange): Promise<void> {
	if (alarmId === undefined) return;
	await client.query('INSERT INTO alarm_events (alarm_id, at, kind, level, value) VALUES ($1, $2, $3, $4, $5)', [
		alarmId,
		iso(change.at),
		change.kind,
		change.levelNow ?? change.level,
		change.value,
	]);
}

/**
 * Applies what became of sources' connections, in order: one alarm a lost source, its tags' stale alarms suppressed as its consequence and counted.
 * Answers the events to tell; what is applied already changes nothing and tells nothing.
 */
export async function applyConnectionChanges(client: Client, changes: readonly ConnectionChange[]): Promise<FeedEvent[]> {
	const events: FeedEvent[] = [];
	for (const change of changes) {
		const isNew = change.kind === 'lost' ? await raiseConnection(client, change) : await clearConnection(client, change);
		if (isNew)
			events.push({
				siteId: change.siteId,
				event: change.kind === 'lost' ? 'source-lost' : 'source-back',
				at: change.at,
				source: change.source,
				source_id: change.sourceId,
			});
	}
	return events;
}

async function raiseConnection(client: Client, { siteId, sourceId, at, suppressed }: ConnectionChange): Promise<boolean> {
	const made = await client.query<{ id: number }>(
		`INSERT INTO alarms (site_id, source_id, direction, kind, level, level_now, raised_at, suppressed_count)
		 SELECT $1, $2::uuid, 'connection', 'connection', 'alert', 'alert', $3::timestamptz, $4::int
		 WHERE NOT EXISTS (SELECT FROM alarms WHERE source_id = $2 AND raised_at = $3) ON CONFLICT DO NOTHING RETURNING id`,
		[siteId, sourceId, iso(at), suppressed],
	);
	const id = made.rows[0]?.id;
	if (id === undefined) {
		await client.query(
			'UPDATE alarms SET suppressed_count = greatest(suppressed_count, $2) WHERE source_id = $1 AND cleared_at IS NULL',
			[sourceId, suppressed],
		);
		return false;
	}
	await client.query("INSERT INTO alarm_events (alarm_id, at, kind, level) VALUES ($1, $2, 'raised', 'alert')", [id, iso(at)]);
	return true;
}

async function clearConnection(client: Client, { sourceId, at }: ConnectionChange): Promise<boolean> {
	const cleared = await client.query<{ id: number }>(
		'UPDATE alarms SET cleared_at = greatest($2::timestamptz, raised_at), level_now = NULL WHERE source_id = $1 AND raised_at <= $2 AND cleared_at IS NULL RETURNING id',
		[sourceId, iso(at)],
	);
	const id = cleared.rows[0]?.id;
	if (id === undefined) return false;
	await client.query("INSERT INTO alarm_events (alarm_id, at, kind) VALUES ($1, $2, 'cleared')", [id, iso(at)]);
	return true;
}
