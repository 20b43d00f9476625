import { z } from 'zod';
import { limitSchema } from '#lib/domain/limit.ts';
import { api } from '#lib/server/http/api.ts';
import { badInput } from '#lib/server/http/problem.ts';
import { backTest, type BackTestItem } from '#lib/server/limits/back-test.ts';
import { limitJson } from '#lib/server/limits/limit-json.ts';
import { stretchFields, stretchOf } from '#lib/server/limits/stretch.ts';
import { shutdownSignal } from '#lib/server/shutdown.ts';

const time = z.iso.datetime().nullable();
const item = z.object({
	tag: z.string(),
	level: z.enum(['alert', 'danger']),
	kind: z.string(),
	value: z.number().nullable(),
	raises: z.number().int(),
	alarm_s: z.number(),
	longest_s: z.number(),
	first_at: time,
	last_at: time,
	open: z.boolean(),
});

export const POST = api(
	{
		summary:
			'How often limits would have raised over stored readings, the last 30 days unless a stretch is given, beside those in force. Nothing is saved. Delays that a keep-alive completed are seen at the next stored reading.',
		permission: 'limits:edit',
		body: z.strictObject({ limits: z.array(limitSchema).min(1).max(200), ...stretchFields }),
		answer: z.object({
			from: z.iso.datetime(),
			to: z.iso.datetime(),
			/** Where it stopped; before `to` when there were too many readings for one back-test. */
			until: z.iso.datetime(),
			complete: z.boolean(),
			readings: z.number().int(),
			items: z.array(item),
			standing: z.array(item),
			skipped: z.array(limitJson),
		}),
	},
	async ({ pool, site, body, request }) => {
		const stretch = stretchOf(body, Date.now());
		const signal = AbortSignal.any([request.signal, shutdownSignal]);
		const found = await backTest(pool, { siteId: site.id, limits: body.limits, ...stretch, signal });
		if ('unknown' in found)
			throw badInput(
				found.unknown.map((name) => ({
					pointer: `/limits/${body.limits.findIndex((limit) => limit.tag.toLowerCase() === name)}/tag`,
					detail: `no published tag is named ${name}`,
				})),
			);
		const iso = (at: number) => new Date(at).toISOString();
		return {
			from: iso(stretch.from),
			to: iso(stretch.to),
			until: iso(found.until),
			complete: found.isComplete,
			readings: found.readings,
			items: found.items.map(toJson),
			standing: found.standing.map(toJson),
			skipped: found.skipped,
		};
	},
);

function toJson({ limit, raises, alarmS, longestS, firstAt, lastAt, isOpen }: BackTestItem) {
	return {
		tag: limit.tag,
		level: limit.level,
		kind: limit.kind,
		value: limit.value ?? limit.state ?? null,
		raises,
		alarm_s: alarmS,
		longest_s: longestS,
		first_at: firstAt === null ? null : new Date(firstAt).toISOString(),
		last_at: lastAt === null ? null : new Date(lastAt).toISOString(),
		open: isOpen,
	};
}
