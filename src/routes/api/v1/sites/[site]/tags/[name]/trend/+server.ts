import { z } from 'zod';
import { qualityJson } from '#lib/domain/quality.ts';
import { findCourseEvents, findLimitCourse } from '#lib/server/limits/find-limit-course.ts';
import { findTrend } from '#lib/pipeline/store/find-trend.ts';
import { qualitySchema } from '#lib/server/feed/answer-schema.ts';
import { api } from '#lib/server/http/api.ts';
import { intParam, timeParam } from '#lib/server/http/parameters.ts';
import { badParameter, Problem } from '#lib/server/http/problem.ts';
import { toRfc3339 } from '#lib/server/http/rfc3339.ts';
import { findTag } from '#lib/server/tags/find-tags.ts';

const DAY_MS = 86_400_000;

export const GET = api(
	{
		summary: 'The course of one tag in at most `points` spans; the last day unless a range is given.',
		permission: 'site:read',
		query: z.strictObject({ from: timeParam.optional(), to: timeParam.optional(), points: intParam(1, 10_000).default(500) }),
		answer: z.object({
			unit: z.string(),
			/** Width of an item in seconds, and from what it was drawn. */
			bucket_s: z.number(),
			level: z.enum(['readings', 'minute', 'hour']),
			/** High and low limits in force at some time of the range; `to` is null while it stands. */
			limits: z.array(
				z.object({
					kind: z.enum(['high', 'low']),
					level: z.enum(['alert', 'danger']),
					value: z.number(),
					from: z.iso.datetime(),
					to: z.iso.datetime().nullable(),
					origin: z.string(),
					note: z.string().nullable(),
				}),
			),
			/** Publishes that changed the tag, and changes of its limits. */
			events: z.array(
				z.object({
					at: z.iso.datetime(),
					kind: z.enum(['published', 'limits']),
					revision: z.number().int(),
					by: z.string(),
					note: z.string(),
				}),
			),
			items: z.array(
				z.object({
					at: z.iso.datetime(),
					min: z.number().nullable(),
					max: z.number().nullable(),
					mean: z.number().nullable(),
					n: z.number().int(),
					worst: qualitySchema,
				}),
			),
		}),
	},
	async ({ db, pool, site, params, query }) => {
		const to = query.to ?? Date.now();
		const from = query.from ?? to - DAY_MS;
		if (from >= to) throw badParameter('from', 'a time before `to`');
		const tag = await findTag(db, site.id, params.name);
		if (!tag) throw new Problem(404, 'tag-not-found', 'No published tag at this site has that name.');
		const [{ buckets, widthS, level }, limits, events] = await Promise.all([
			findTrend(pool, tag.id, from, to, query.points, site.timeZone),
			findLimitCourse(pool, tag.id, from, to),
			findCourseEvents(pool, tag.id, from, to),
		]);
		return {
			unit: tag.unit,
			bucket_s: widthS,
			level,
			limits: limits.map((limit) => ({
				...limit,
				from: toRfc3339(limit.from),
				to: limit.to === null ? null : toRfc3339(limit.to),
			})),
			events: events.map((event) => ({ ...event, at: toRfc3339(event.at) })),
			items: buckets.map(({ at, min, max, mean, n, worst }) => ({
				at: toRfc3339(at),
				min,
				max,
				mean,
				n,
				worst: qualityJson(worst),
			})),
		};
	},
);
