// Pure.
import { z } from 'zod';

export const qualitySchema = z.object({
	code: z.number().int().min(0),
	name: z.string(),
	severity: z.enum(['good', 'uncertain', 'bad']),
});
const time = z.iso.datetime();

export const readingItem = z.object({
	kind: z.literal('reading'),
	tag_id: z.number().int(),
	tag: z.string(),
	at: time,
	value: z.number().nullable(),
	unit: z.string(),
	quality: qualitySchema,
	time_from: z.enum(['source', 'hub']),
	test: z.literal(true).optional(),
});

/** A renamed or retired tag, a changed unit, a source lost or back; what else it says depends on the event. */
export const eventItem = z.looseObject({
	kind: z.literal('event'),
	event: z.string(),
	at: time,
	tag_id: z.number().int().optional(),
	tag: z.string().optional(),
});

export const feedItem = z.union([readingItem, eventItem]);
