// Pure.
import { z } from 'zod';

export const LIMIT_KINDS = ['high', 'low', 'rate', 'deviation', 'stale', 'state'] as const;
export const LIMIT_LEVELS = ['alert', 'danger'] as const;
export const LIMIT_ORIGINS = ['standard', 'baseline', 'maker', 'site'] as const;
export const ALARM_DIRECTIONS = ['up', 'down', 'state', 'stale'] as const;
export const ALARM_STATES = ['active-unacknowledged', 'active-acknowledged', 'returned-unacknowledged', 'closed'] as const;

export type LimitKind = (typeof LIMIT_KINDS)[number];
export type LimitLevel = (typeof LIMIT_LEVELS)[number];
export type AlarmDirection = (typeof ALARM_DIRECTIONS)[number];
export type AlarmState = (typeof ALARM_STATES)[number];

const seconds = z.number().min(0).max(31_536_000);
const text = z.string().max(2_000);

/** One limit of one tag, in the tag's unit, as the API reads and writes it. */
export const limitSchema = z
	.strictObject({
		tag: z.string().min(1).max(120),
		kind: z.enum(LIMIT_KINDS),
		level: z.enum(LIMIT_LEVELS),
		/** High, low: in the tag's unit. Rate: unit per minute, negative for falling. Deviation: number of sigmas. Stale: seconds without a reading; absent means the tag's own stale time. */
		value: z.number().nullish(),
		deadband: z.number().min(0).nullish(),
		raise_after_s: seconds.nullish(),
		clear_after_s: seconds.nullish(),
		window_s: seconds.nullish(),
		baseline: z
			.strictObject({ mean: z.number(), sigma: z.number().positive(), from: z.string().nullish(), to: z.string().nullish() })
			.nullish(),
		/** Kind state: the value of the state that is the alarm. */
		state: z.number().nullish(),
		origin: z.enum(LIMIT_ORIGINS).nullish(),
		note: text.nullish(),
		cause: text.nullish(),
		consequence: text.nullish(),
		response: text.nullish(),
		respond_within_s: seconds.nullish(),
	})
	.superRefine((limit, ctx) => {
		const missing = (path: string, message: string) => ctx.addIssue({ code: 'custom', path: [path], message });
		if (['high', 'low', 'rate', 'deviation'].includes(limit.kind) && limit.value == null)
			missing('value', `a ${limit.kind} limit needs a value`);
		if (limit.kind === 'rate' && !(limit.window_s != null && limit.window_s > 0))
			missing('window_s', 'a rate limit needs a window above 0 s');
		if (limit.kind === 'deviation' && limit.baseline == null) missing('baseline', 'a deviation limit needs a baseline');
		if (limit.kind === 'state' && limit.state == null) missing('state', 'a state limit needs the state that is the alarm');
		if (limit.level === 'danger') {
			for (const field of ['cause', 'consequence', 'response'] as const) {
				if (!limit[field]?.trim()) missing(field, `a danger limit says its ${field}`);
			}
			if (limit.respond_within_s == null) missing('respond_within_s', 'a danger limit says how long there is to respond');
		}
	});

export type Limit = z.infer<typeof limitSchema>;

/** Direction of the alarm that this limit raises. */
export function directionOf(limit: Pick<Limit, 'kind' | 'value'>): AlarmDirection {
	switch (limit.kind) {
		case 'high':
			return 'up';
		case 'low':
			return 'down';
		case 'rate':
			return (limit.value ?? 0) < 0 ? 'down' : 'up';
		case 'deviation':
			return 'up';
		case 'state':
			return 'state';
		case 'stale':
			return 'stale';
	}
}
