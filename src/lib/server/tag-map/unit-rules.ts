// Edge: tag map. May touch: the pure unit code only; stands here so that the domain needs no unit table.
import type { UnitRules } from '#lib/domain/tag-map/check-draft.ts';
import type { Detector } from '#lib/domain/tag-map/row.ts';
import { compileConversion, type Line } from '#lib/pipeline/normalize/units/convert.ts';
import { fitsQuantity } from '#lib/pipeline/normalize/units/quantity.ts';
import { isUnit } from '#lib/pipeline/normalize/units/ucum.ts';

/** Units as the check of a draft asks for them. */
export const unitRules: UnitRules = { isUnit, fitsQuantity, conversion: compileConversion };

interface UnitAndDetector {
	unit: string;
	detector: Detector;
}

/** The line between a tag's old and new unit; null where there is none. */
export function conversionBetween(from: UnitAndDetector, to: UnitAndDetector, frequencyHz: number | null): Line | null {
	const outcome = compileConversion({
		rawUnit: from.unit,
		rawDetector: from.detector,
		unit: to.unit,
		detector: to.detector,
		frequencyHz,
	});
	return outcome.ok ? outcome.value : null;
}
