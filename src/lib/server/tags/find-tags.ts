// Edge: tags. May touch: tag, machine, source and limit tables, select only.
import { and, asc, eq, inArray, isNotNull, isNull, sql, type SQL } from 'drizzle-orm';
import type { Db } from '#lib/server/db/pool.ts';
import { areas, machines, measuringPoints } from '#lib/server/db/schema/site.ts';
import { sources } from '#lib/server/db/schema/source.ts';
import { tags } from '#lib/server/db/schema/tag-map.ts';
import { encodeCursor } from '#lib/server/http/cursor.ts';
import { findLimitsOf } from '#lib/server/limits/list-limits.ts';
import { toTagJson, type TagJson } from './tag-json.ts';

export interface TagFilter {
	siteId: number;
	/** Part of the name, the plant's own code or the description. */
	search?: string;
	/** Name of a machine. */
	machine?: string;
	/** Name or id of a source. */
	source?: string;
	/** Retired tags instead of live ones. */
	isRetired?: boolean;
	/** Lower-case name and id that the page before ended at. */
	after?: readonly [name: string, id: number];
	limit?: number;
}

const COLUMNS = {
	id: tags.id,
	name: tags.name,
	unit: tags.unit,
	detector: tags.detector,
	quantity: tags.quantity,
	row: tags.row,
	source: sources.name,
	machine: machines.name,
	area: areas.name,
	point: measuringPoints.name,
	isRetired: sql<boolean>`${tags.retiredAt} is not null`,
	sortName: sql<string>`lower(${tags.name})`,
};

function select(db: Db) {
	return db
		.select(COLUMNS)
		.from(tags)
		.leftJoin(sources, eq(sources.id, tags.sourceId))
		.leftJoin(machines, eq(machines.id, tags.machineId))
		.leftJoin(areas, eq(areas.id, machines.areaId))
		.leftJoin(measuringPoints, eq(measuringPoints.id, tags.pointId));
}

/** Published tags by name, one page. */
export async function findTags(db: Db, filter: TagFilter): Promise<{ items: TagJson[]; next: string | null }> {
	const most = filter.limit ?? 1_000;
	const like = filter.search ? `%${filter.search.replace(/[\\%_]/g, '\\$&')}%` : null;
	const conditions: (SQL | undefined)[] = [
		eq(tags.siteId, filter.siteId),
		isNotNull(tags.publishedAt),
		filter.isRetired ? isNotNull(tags.retiredAt) : isNull(tags.retiredAt),
		like
			? sql`(${tags.name} ilike ${like} or ${tags.row}->>'plant_tag' ilike ${like} or ${tags.row}->>'description' ilike ${like})`
			: undefined,
		filter.machine ? sql`lower(${machines.name}) = lower(${filter.machine})` : undefined,
		filter.source
			? sql`(lower(${sources.name}) = lower(${filter.source}) or ${sources.id}::text = lower(${filter.source}))`
			: undefined,
		filter.after ? sql`(lower(${tags.name}), ${tags.id}) > (${filter.after[0]}, ${filter.after[1]}::int)` : undefined,
	];
	const rows = await select(db)
		.where(and(...conditions))
		.orderBy(asc(sql`lower(${tags.name})`), asc(tags.id))
		.limit(most + 1);
	const page = rows.slice(0, most);
	const limits = await findLimitsOf(
		db,
		page.map((tag) => tag.id),
	);
	const last = page.at(-1);
	return {
		items: page.map((tag) => toTagJson(tag, limits.get(tag.id) ?? [])),
		next: rows.length > most && last ? encodeCursor([last.sortName, last.id]) : null,
	};
}

/** One published tag by name, live before retired; null when the site has none. */
export async function findTag(
	db: Db,
	siteId: number,
	name: string,
): Promise<(TagJson & { mapping: Record<string, unknown> | null }) | null> {
	const [tag] = await select(db)
		.where(and(eq(tags.siteId, siteId), isNotNull(tags.publishedAt), sql`lower(${tags.name}) = lower(${name})`))
		.orderBy(sql`${tags.retiredAt} is not null`, sql`${tags.retiredAt} desc`)
		.limit(1);
	if (!tag) return null;
	const limits = await findLimitsOf(db, [tag.id]);
	return { ...toTagJson(tag, limits.get(tag.id) ?? []), mapping: tag.row };
}

/** Ids of published tags by name; names that no live tag has are answered apart. */
export async function findTagIds(
	db: Db,
	siteId: number,
	names: readonly string[],
): Promise<{ ids: number[]; unknown: string[] }> {
	if (names.length === 0) return { ids: [], unknown: [] };
	const rows = await db
		.select({ id: tags.id, name: tags.name })
		.from(tags)
		.where(
			and(
				eq(tags.siteId, siteId),
				isNotNull(tags.publishedAt),
				isNull(tags.retiredAt),
				inArray(
					sql`lower(${tags.name})`,
					names.map((name) => name.toLowerCase()),
				),
			),
		);
	const known = new Set(rows.map((tag) => tag.name.toLowerCase()));
	return { ids: rows.map((tag) => tag.id), unknown: names.filter((name) => !known.has(name.toLowerCase())) };
}
