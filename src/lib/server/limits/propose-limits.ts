// Edge: limits. May touch: limit tables; store finders.
import { inArray, and, eq, isNotNull, isNull, sql } from 'drizzle-orm';
import { LEAST_READINGS, LEAST_SPAN_MS, proposeLimits, type Proposal } from '#lib/domain/propose-limits.ts';
import type { ZoneMachine } from '#lib/domain/severity-zones.ts';
import type { Detector } from '#lib/domain/tag-map/row.ts';
import { compileConversion } from '#lib/pipeline/normalize/units/convert.ts';
import { findBaseline } from '#lib/pipeline/store/find-baseline.ts';
import { createDb, type Pool } from '#lib/server/db/pool.ts';
import { machines, measuringPoints } from '#lib/server/db/schema/site.ts';
import { tags } from '#lib/server/db/schema/tag-map.ts';

export interface ProposeInput {
	siteId: number;
	/** Names of published tags. */
	tags: readonly string[];
	/** Stretch of history that a baseline is made of, [from, to), ms. */
	from: number;
	to: number;
}

/** Proposals for published tags, in the order asked; names that are none are left out and returned. Saves nothing. */
export async function proposeForTags(pool: Pool, input: ProposeInput): Promise<{ proposals: Proposal[]; unknown: string[] }> {
	const found = await createDb(pool)
		.select({
			id: tags.id,
			name: tags.name,
			unit: tags.unit,
			detector: tags.detector,
			quantity: tags.quantity,
			row: tags.row,
			machine: machines.data,
			point: measuringPoints.data,
		})
		.from(tags)
		.leftJoin(machines, eq(machines.id, tags.machineId))
		.leftJoin(measuringPoints, eq(measuringPoints.id, tags.pointId))
		.where(
			and(
				eq(tags.siteId, input.siteId),
				isNotNull(tags.publishedAt),
				isNull(tags.retiredAt),
				inArray(
					sql`lower(${tags.name})`,
					input.tags.map((name) => name.toLowerCase()),
				),
			),
		);
	const byName = new Map(found.map((tag) => [tag.name.toLowerCase(), tag]));
	const proposals: Proposal[] = [];
	const unknown: string[] = [];
	for (const name of new Set(input.tags.map((one) => one.toLowerCase()))) {
		const tag = byName.get(name);
		if (!tag) {
			unknown.push(name);
			continue;
		}
		const stretch = await findBaseline(pool, tag.id, input.from, input.to);
		const isEnough = stretch !== null && stretch.n >= LEAST_READINGS && stretch.to - stretch.from >= LEAST_SPAN_MS;
		const perMmS = compileConversion({
			rawUnit: 'mm/s',
			rawDetector: 'rms',
			unit: tag.unit,
			detector: tag.detector as Detector,
			frequencyHz: null,
		});
		const { row } = tag;
		proposals.push(
			proposeLimits({
				tag: tag.name,
				quantity: tag.quantity,
				unit: tag.unit,
				bandLowHz: row?.band_low_hz ?? null,
				bandHighHz: row?.band_high_hz ?? null,
				everyS: Math.max(row?.expected_every_s ?? 0, (row?.interval_ms ?? 1_000) / 1_000),
				machine: tag.machine ? zoneMachineOf(tag.machine) : null,
				part: partOf(tag.point),
				perMmS: tag.quantity === 'velocity' && perMmS.ok && perMmS.value.offset === 0 ? perMmS.value.factor : null,
				baseline: isEnough ? stretch : null,
			}),
		);
	}
	return { proposals, unknown };
}

const number = (value: unknown) => (typeof value === 'number' && Number.isFinite(value) ? value : null);
const oneOf = <T extends string>(value: unknown, words: readonly T[]) => words.find((word) => word === value) ?? null;

function zoneMachineOf(data: Record<string, unknown>): ZoneMachine {
	const group = number(data.iso_group);
	return {
		kind: typeof data.kind === 'string' ? data.kind : null,
		powerKw: number(data.power_kw),
		speedRpm: number(data.speed_rpm),
		isoGroup: group === 1 || group === 2 ? group : null,
		foundation: oneOf(data.foundation, ['rigid', 'flexible']),
		pumpCategory: oneOf(data.pump_category, ['I', 'II']),
	};
}

function partOf(point: Record<string, unknown> | null): 'motor' | 'driven' | null {
	return oneOf(point?.part, ['motor', 'driven']);
}
