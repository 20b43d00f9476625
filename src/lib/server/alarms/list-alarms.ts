// Edge: alarms. May touch: alarm tables.
import { and, desc, eq, gte, inArray, isNotNull, isNull, lt, or, sql, type SQL } from 'drizzle-orm';
import { alias } from 'drizzle-orm/pg-core';
import type { AlarmState } from '#lib/domain/limit.ts';
import type { Db } from '#lib/server/db/pool.ts';
import { alarms, tagStates } from '#lib/server/db/schema/alarm.ts';
import { machines } from '#lib/server/db/schema/site.ts';
import { sources } from '#lib/server/db/schema/source.ts';
import { limits, tags } from '#lib/server/db/schema/tag-map.ts';
import { encodeCursor } from '#lib/server/http/cursor.ts';
import { LIMIT_COLUMNS } from '#lib/server/limits/list-limits.ts';
import { toAlarmJson, type AlarmJson } from './alarm-json.ts';

export interface AlarmFilter {
	siteId: number;
	states?: readonly AlarmState[];
	/** Name of a tag. */
	tag?: string;
	/** Highest level reached. */
	level?: 'alert' | 'danger';
	/** Name of a machine. */
	machine?: string;
	/** Part of a tag's or a source's name. */
	search?: string;
	/** Half-open range of the raise, milliseconds. */
	from?: number;
	to?: number;
	/** Raise (milliseconds) and id that the page before ended at. */
	after?: readonly [raisedAt: number, id: number];
	limit?: number;
}

/** Each state as the columns say it; the same rule as `alarmStateOf` in alarm-json.ts. */
const STATE_SQL: Readonly<Record<AlarmState, SQL | undefined>> = {
	'active-unacknowledged': and(isNull(alarms.clearedAt), isNull(alarms.acknowledgedAt)),
	'active-acknowledged': and(isNull(alarms.clearedAt), isNotNull(alarms.acknowledgedAt)),
	'returned-unacknowledged': and(isNotNull(alarms.clearedAt), isNull(alarms.acknowledgedAt), eq(alarms.isLate, false)),
	closed: and(isNotNull(alarms.clearedAt), or(isNotNull(alarms.acknowledgedAt), eq(alarms.isLate, true))),
};

/** The source of the alarm's tag; `sources` is that of a connection alarm. */
const tagSource = alias(sources, 'tag_source');

function select(db: Db) {
	return db
		.select({
			id: alarms.id,
			tag: tags.name,
			unit: tags.unit,
			source: sources.name,
			machine: machines.name,
			point: sql<string | null>`${tags.row}->>'point'`,
			detector: tags.detector,
			contact: sql<string | null>`coalesce(nullif(${machines.data}->>'contact', ''), ${sources.contact}, ${tagSource.contact})`,
			direction: alarms.direction,
			kind: alarms.kind,
			level: alarms.level,
			levelNow: alarms.levelNow,
			raisedAt: alarms.raisedAt,
			clearedAt: alarms.clearedAt,
			acknowledgedAt: alarms.acknowledgedAt,
			acknowledgedBy: alarms.acknowledgedBy,
			acknowledgeNote: alarms.acknowledgeNote,
			raisedValue: alarms.raisedValue,
			isUncertain: alarms.isUncertain,
			isLate: alarms.isLate,
			isTest: alarms.isTest,
			suppressedCount: alarms.suppressedCount,
			shelvedUntil: tagStates.shelvedUntil,
			shelvedBy: tagStates.shelvedBy,
			shelvedNote: tagStates.shelvedNote,
			outOfServiceUntil: tagStates.outOfServiceUntil,
			outOfServiceBy: tagStates.outOfServiceBy,
			outOfServiceNote: tagStates.outOfServiceNote,
			limit: LIMIT_COLUMNS,
		})
		.from(alarms)
		.leftJoin(tags, eq(tags.id, alarms.tagId))
		.leftJoin(sources, eq(sources.id, alarms.sourceId))
		.leftJoin(tagSource, eq(tagSource.id, tags.sourceId))
		.leftJoin(machines, eq(machines.id, tags.machineId))
		.leftJoin(limits, eq(limits.id, alarms.limitId))
		.leftJoin(tagStates, eq(tagStates.tagId, alarms.tagId));
}

type Selected = Awaited<ReturnType<typeof select>>[number];

/** A left join without a partner gives an object of nulls. */
function toJson(row: Selected): AlarmJson {
	const { limit } = row;
	const isThere = limit !== null && limit.kind !== null;
	return toAlarmJson({ ...row, limit: isThere ? limit : null }, new Date());
}

/** Alarms, newest raise first, one page. */
export async function listAlarms(db: Db, filter: AlarmFilter): Promise<{ items: AlarmJson[]; next: string | null }> {
	const most = filter.limit ?? 200;
	const conditions: (SQL | undefined)[] = [
		eq(alarms.siteId, filter.siteId),
		filter.states ? or(...filter.states.map((state) => STATE_SQL[state])) : undefined,
		filter.tag
			? inArray(
					alarms.tagId,
					db
						.select({ id: tags.id })
						.from(tags)
						.where(and(eq(tags.siteId, filter.siteId), sql`lower(${tags.name}) = lower(${filter.tag})`)),
				)
			: undefined,
		filter.level ? eq(alarms.level, filter.level) : undefined,
		filter.machine ? sql`lower(${machines.name}) = lower(${filter.machine})` : undefined,
		filter.search ? sql`strpos(lower(coalesce(${tags.name}, ${sources.name}, '')), lower(${filter.search})) > 0` : undefined,
		filter.from === undefined ? undefined : gte(alarms.raisedAt, new Date(filter.from)),
		filter.to === undefined ? undefined : lt(alarms.raisedAt, new Date(filter.to)),
		filter.after
			? sql`(${alarms.raisedAt}, ${alarms.id}) < (${new Date(filter.after[0]).toISOString()}::timestamptz, ${filter.after[1]}::bigint)`
			: undefined,
	];
	const rows = await select(db)
		.where(and(...conditions))
		.orderBy(desc(alarms.raisedAt), desc(alarms.id))
		.limit(most + 1);
	const page = rows.slice(0, most);
	const last = page.at(-1);
	return {
		items: page.map(toJson),
		next: rows.length > most && last ? encodeCursor([last.raisedAt.getTime(), last.id]) : null,
	};
}

/** One alarm of a site, or null. */
export async function findAlarm(db: Db, siteId: number, id: number): Promise<AlarmJson | null> {
	const [row] = await select(db).where(and(eq(alarms.siteId, siteId), eq(alarms.id, id)));
	return row ? toJson(row) : null;
}
