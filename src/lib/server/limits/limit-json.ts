// Pure.
import { z } from 'zod';
import { limitSchema, type Limit } from '#lib/domain/limit.ts';

/** A limit as answers show it: every field there, null where nothing is said. What is answered can be sent back. */
export const limitJson = z.object(limitSchema.shape);

/** Columns of the limits table that make a limit. */
export interface LimitColumns {
	kind: string;
	level: 'alert' | 'danger';
	value: number | null;
	deadband: number;
	raiseAfterS: number;
	clearAfterS: number;
	windowS: number | null;
	baseline: { mean: number; sigma: number; from?: string | null; to?: string | null } | null;
	state: number | null;
	origin: 'standard' | 'baseline' | 'maker' | 'site';
	note: string | null;
	cause: string | null;
	consequence: string | null;
	response: string | null;
	respondWithinS: number | null;
}

/** A stored limit as the API writes it. */
export function toLimitJson(tag: string, row: LimitColumns): Limit {
	return {
		tag,
		kind: row.kind as Limit['kind'],
		level: row.level,
		value: row.value,
		deadband: row.deadband,
		raise_after_s: row.raiseAfterS,
		clear_after_s: row.clearAfterS,
		window_s: row.windowS,
		baseline: row.baseline,
		state: row.state,
		origin: row.origin,
		note: row.note,
		cause: row.cause,
		consequence: row.consequence,
		response: row.response,
		respond_within_s: row.respondWithinS,
	};
}

/** A limit as the table keeps it. */
export function toLimitColumns(limit: Limit): LimitColumns {
	return {
		kind: limit.kind,
		level: limit.level,
		value: limit.value ?? null,
		deadband: limit.deadband ?? 0,
		raiseAfterS: limit.raise_after_s ?? 0,
		clearAfterS: limit.clear_after_s ?? 0,
		windowS: limit.window_s ?? null,
		baseline: limit.baseline ?? null,
		state: limit.state ?? null,
		origin: limit.origin ?? 'site',
		note: limit.note ?? null,
		cause: limit.cause ?? null,
		consequence: limit.consequence ?? null,
		response: limit.response ?? null,
		respondWithinS: limit.respond_within_s ?? null,
	};
}

/** Two limits of one tag with the same key would contradict each other. */
export function limitKey(limit: Pick<Limit, 'kind' | 'level' | 'value' | 'state'>): string {
	const which = limit.kind === 'rate' ? Math.sign(limit.value ?? 0) : limit.kind === 'state' ? limit.state : '';
	return `${limit.kind} ${limit.level} ${which}`;
}

/** True when both say the same, whatever order their members stand in. */
export function isSameLimit(a: LimitColumns, b: LimitColumns): boolean {
	const { baseline: baseA, ...restA } = a;
	const { baseline: baseB, ...restB } = b;
	const isSameBaseline =
		baseA === baseB ||
		(baseA !== null &&
			baseB !== null &&
			baseA.mean === baseB.mean &&
			baseA.sigma === baseB.sigma &&
			(baseA.from ?? null) === (baseB.from ?? null) &&
			(baseA.to ?? null) === (baseB.to ?? null));
	const keys = Object.keys(restA) as (keyof typeof restA)[];
	return isSameBaseline && keys.every((key) => restA[key] === restB[key]);
}
