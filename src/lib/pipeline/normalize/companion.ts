// Pure.
import type { RawScalar } from '#lib/domain/reading.ts';
import type { TagPlan } from '#lib/domain/tag-map/tag-plan.ts';
import { parseTime } from '#lib/pipeline/decode/time-value.ts';

interface Companions {
	companion(tagId: number): RawScalar | undefined;
}

function numberOf(raw: RawScalar | undefined): number | null {
	if (raw === undefined || raw === null) return null;
	const number = Number(raw);
	return Number.isFinite(number) ? number : null;
}

/** The time that a companion tag tells for this one: epoch seconds or milliseconds from a time tag, or now less an age in seconds; null without one. */
export function companionTime(
	plan: Pick<TagPlan, 'timeTagId' | 'ageTagId'>,
	{ companion }: Companions,
	receivedAt: number,
): number | null {
	if (plan.timeTagId !== null) {
		const raw = companion(plan.timeTagId);
		return raw === undefined || raw === null || typeof raw === 'boolean' ? null : parseTime(raw, 'auto');
	}
	if (plan.ageTagId !== null) {
		const age = numberOf(companion(plan.ageTagId));
		// Whole seconds of age against a moving clock jitter by one; whole seconds keep the same measurement the same.
		return age === null || age < 0 ? null : Math.floor((receivedAt - age * 1_000) / 1_000) * 1_000;
	}
	return null;
}

/** Whether the validity companion allows the value: `=1` compares, `&0x8000` asks for every bit of the mask. True without a companion, or before it came. */
export function isValidBy(plan: Pick<TagPlan, 'validTagId' | 'validWhen'>, { companion }: Companions): boolean {
	if (plan.validTagId === null || !plan.validWhen) return true;
	const number = numberOf(companion(plan.validTagId));
	if (number === null) return true;
	const wanted = Number(plan.validWhen.slice(1));
	if (plan.validWhen.startsWith('=')) return number === wanted;
	return (BigInt(Math.trunc(number)) & BigInt(wanted)) === BigInt(wanted);
}
