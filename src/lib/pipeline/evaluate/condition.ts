// Pure.
import type { PlannedLimit } from '#lib/domain/tag-map/tag-plan.ts';
import type { AlarmDirection } from '#lib/domain/limit.ts';

/** What a limit's condition says of a value: it holds, it is gone, or it cannot be told. */
export interface Condition {
	holds: boolean;
	direction: AlarmDirection;
}

/**
 * Whether a limit's condition holds for a value; `held` is whether it held before, which the deadband asks for.
 * High: holds while value ≥ limit and, once it held, until value < limit − deadband. Low mirrors it.
 */
export function conditionOf(limit: PlannedLimit, value: number, rate: number | null, held: boolean): Condition | null {
	const deadband = limit.deadband ?? 0;
	const bound = limit.value ?? 0;
	switch (limit.kind) {
		case 'high':
			return { holds: held ? value >= bound - deadband : value >= bound, direction: 'up' };
		case 'low':
			return { holds: held ? value <= bound + deadband : value <= bound, direction: 'down' };
		case 'rate': {
			if (rate === null) return null;
			if (bound < 0) return { holds: held ? rate <= bound + deadband : rate <= bound, direction: 'down' };
			return { holds: held ? rate >= bound - deadband : rate >= bound, direction: 'up' };
		}
		case 'deviation': {
			if (!limit.baseline) return null;
			const away = value - limit.baseline.mean;
			const allowed = bound * limit.baseline.sigma;
			return {
				holds: held ? Math.abs(away) > allowed - deadband : Math.abs(away) > allowed,
				direction: away < 0 ? 'down' : 'up',
			};
		}
		case 'state':
			return { holds: value === limit.state, direction: 'state' };
		case 'stale':
			return null;
	}
}
