// Edge: machines. Shapes of machines in the API. May touch: zod.
import { z } from 'zod';

const data = z.record(z.string().max(60), z.union([z.string().max(500), z.number(), z.boolean(), z.null()]));
const text = z.string().max(500).nullish();

export const machineInput = z.strictObject({
	name: z.string().trim().min(1).max(120),
	area: z.string().trim().max(120).nullish(),
	description: text,
	/** kind, power_kw, speed_rpm, iso_group, foundation, orientation, vanes, pump_category: what the picture and the zones need. */
	data: data.optional(),
	points: z
		.array(z.strictObject({ name: z.string().trim().min(1).max(120), description: text, data: data.optional() }))
		.max(200)
		.optional(),
});
export const machineChange = machineInput.partial().extend({ version: z.int().optional() });

export const machineJson = z.object({
	id: z.int(),
	name: z.string(),
	area: z.string().nullable(),
	description: z.string().nullable(),
	data: z.record(z.string(), z.unknown()),
	version: z.int(),
	points: z.array(
		z.object({ id: z.int(), name: z.string(), description: z.string().nullable(), data: z.record(z.string(), z.unknown()) }),
	),
	tags: z.int(),
});
