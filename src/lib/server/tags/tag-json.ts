// Pure.
import { z } from 'zod';
import type { MapRow } from '#lib/domain/tag-map/row.ts';
import type { Limit } from '#lib/domain/limit.ts';
import { limitJson } from '#lib/server/limits/limit-json.ts';

/** A tag as the list shows it. */
export const tagJson = z.object({
	id: z.number().int(),
	name: z.string(),
	plant_tag: z.string().nullable(),
	description: z.string().nullable(),
	area: z.string().nullable(),
	machine: z.string().nullable(),
	point: z.string().nullable(),
	axis: z.string().nullable(),
	quantity: z.string().nullable(),
	unit: z.string(),
	detector: z.string(),
	range: z.object({ low: z.number().nullable(), high: z.number().nullable() }),
	source: z.string().nullable(),
	states: z.string().nullable(),
	retired: z.boolean(),
	limits: z.array(limitJson),
});
export type TagJson = z.infer<typeof tagJson>;

/** A tag as the database joins it. */
export interface TagRow {
	id: number;
	name: string;
	unit: string;
	detector: string;
	quantity: string | null;
	row: MapRow | null;
	source: string | null;
	machine: string | null;
	area: string | null;
	point: string | null;
	isRetired: boolean;
}

/** One tag with its limits, as answers show it. */
export function toTagJson(tag: TagRow, limits: readonly Limit[]): TagJson {
	const { row } = tag;
	return {
		id: tag.id,
		name: tag.name,
		plant_tag: row?.plant_tag ?? null,
		description: row?.description ?? null,
		area: tag.area ?? row?.area ?? null,
		machine: tag.machine ?? row?.machine ?? null,
		point: tag.point ?? row?.point ?? null,
		axis: row?.axis ?? null,
		quantity: tag.quantity ?? row?.quantity ?? null,
		unit: tag.unit,
		detector: tag.detector,
		range: { low: row?.low_range ?? null, high: row?.high_range ?? null },
		source: tag.source ?? row?.source ?? null,
		states: row?.states ?? null,
		retired: tag.isRetired,
		limits: [...limits],
	};
}
