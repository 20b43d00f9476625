// Edge: limits. May touch: problem details.
import { z } from 'zod';
import { badInput } from '#lib/server/http/problem.ts';
import { parseRfc3339 } from '#lib/server/http/rfc3339.ts';

const DAY_MS = 86_400_000;
/** What is looked at unless asked otherwise, and at most. */
const USUAL_DAYS = 30;
const MOST_DAYS = 400;

const time = z
	.string()
	.refine((text) => parseRfc3339(text) !== null, 'an RFC 3339 time such as 2026-01-31T12:00:00.000Z')
	.nullish();

/** Body members that name a stretch of history. */
export const stretchFields = { from: time, to: time };

/** The stretch [from, to) in ms: up to now and 30 days unless said otherwise. Throws a 400 for one that is empty or too long. */
export function stretchOf(
	body: { from?: string | null | undefined; to?: string | null | undefined },
	now: number,
): { from: number; to: number } {
	const to = body.to ? (parseRfc3339(body.to) ?? now) : now;
	const from = body.from ? (parseRfc3339(body.from) ?? now) : to - USUAL_DAYS * DAY_MS;
	if (from >= to) throw badInput([{ pointer: '/from', detail: 'the stretch ends before it begins' }]);
	if (to - from > MOST_DAYS * DAY_MS)
		throw badInput([{ pointer: '/from', detail: `a stretch of ${Math.ceil((to - from) / DAY_MS)} days; at most ${MOST_DAYS}` }]);
	return { from, to };
}
