// Pure.
import type { RawScalar } from '#lib/domain/reading.ts';
import type { TagPlan } from '#lib/domain/tag-map/tag-plan.ts';

/**
 * The raw scalar that history must keep beside a value, or null where the published row's inverse gives it back exactly, rounded to the raw type.
 * A reading without value keeps its raw always.
 */
export function rawToStore(raw: RawScalar, value: number | null, plan: TagPlan): string | null {
	if (raw === null) return null;
	if (value === null || typeof raw !== 'number') return typeof raw === 'boolean' ? (raw ? '1' : '0') : String(raw);
	return rebuildRaw(value, plan) === raw ? null : String(raw);
}

/** The raw scalar that a stored value came from, by the row's inverse rounded to the raw type. */
export function rebuildRaw(value: number, plan: Pick<TagPlan, 'address' | 'scale' | 'offset' | 'conversion'>): number {
	const scaled = (value - plan.conversion.offset) / plan.conversion.factor;
	const raw = (scaled - plan.offset) / plan.scale;
	if (plan.address.kind !== 'modbus') return Number(raw.toPrecision(15));
	if (plan.address.dataType === 'float32') return Math.fround(raw);
	if (plan.address.dataType === 'float64') return raw;
	return Math.round(raw);
}
