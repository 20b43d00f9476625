import { z } from 'zod';
import { ALARM_STATES, type AlarmState } from '#lib/domain/limit.ts';
import { alarmJson, type AlarmJson } from '#lib/server/alarms/alarm-json.ts';
import { listAlarms } from '#lib/server/alarms/list-alarms.ts';
import { api } from '#lib/server/http/api.ts';
import { decodeCursor } from '#lib/server/http/cursor.ts';
import { CSV_TYPE, JSON_TYPE, NDJSON_TYPE } from '#lib/server/http/negotiate.ts';
import { intParam, timeParam } from '#lib/server/http/parameters.ts';
import { pagesOf, rowStream, type Columns } from '#lib/server/http/row-stream.ts';

const cursor = z.string().transform((text, ctx): [number, number] => {
	const values = decodeCursor(text) ?? [];
	const [raisedAt, id] = values;
	if (values.length === 2 && Number.isSafeInteger(raisedAt) && Number.isSafeInteger(id)) return [Number(raisedAt), Number(id)];
	ctx.addIssue({ code: 'custom', message: 'not a cursor of this list' });
	return z.NEVER;
});

const states = z.string().transform((text, ctx): AlarmState[] => {
	const names = text.split(',');
	if (names.every((name): name is AlarmState => (ALARM_STATES as readonly string[]).includes(name))) return names;
	ctx.addIssue({ code: 'custom', message: `one or more, separated by commas, of ${ALARM_STATES.join(', ')}` });
	return z.NEVER;
});

const COLUMNS: Columns<AlarmJson> = [
	['id', (alarm) => alarm.id],
	['tag', (alarm) => alarm.tag],
	['source', (alarm) => alarm.source],
	['machine', (alarm) => alarm.machine],
	['direction', (alarm) => alarm.direction],
	['kind', (alarm) => alarm.kind],
	['level', (alarm) => alarm.level],
	['level_now', (alarm) => alarm.level_now],
	['state', (alarm) => alarm.state],
	['raised_at', (alarm) => alarm.raised_at],
	['cleared_at', (alarm) => alarm.cleared_at],
	['acknowledged_at', (alarm) => alarm.acknowledged_at],
	['acknowledged_by', (alarm) => alarm.acknowledged_by],
	['value', (alarm) => alarm.value],
	['unit', (alarm) => alarm.unit],
	['limit_value', (alarm) => alarm.limit?.value],
	['test', (alarm) => alarm.test],
];

export const GET = api(
	{
		summary:
			'Alarms of the site, newest raise first, in all states unless asked. CSV and NDJSON without `limit` hold all of them.',
		permission: 'site:read',
		query: z.strictObject({
			state: states.optional(),
			tag: z.string().min(1).max(120).optional(),
			level: z.enum(['alert', 'danger']).optional(),
			machine: z.string().min(1).max(120).optional(),
			search: z.string().min(1).max(120).optional(),
			from: timeParam.optional(),
			to: timeParam.optional(),
			after: cursor.optional(),
			limit: intParam(1, 1_000).optional(),
		}),
		answer: z.object({ items: z.array(alarmJson), next: z.string().nullable() }),
		answerTypes: [CSV_TYPE, NDJSON_TYPE],
	},
	async ({ db, site, query, answerType, headers }) => {
		const { state, limit = answerType === JSON_TYPE ? 200 : 1_000, ...filter } = query;
		const read = (after: [number, number] | undefined) =>
			listAlarms(db, { ...filter, siteId: site.id, states: state, after, limit });
		const first = await read(query.after);
		if (answerType === JSON_TYPE) return first;
		if (query.limit !== undefined && first.next !== null) headers.set('x-next-cursor', first.next);
		const whole = query.limit === undefined ? first : { ...first, next: null };
		return rowStream(
			answerType,
			pagesOf(async (after) => (after === undefined ? whole : read(cursor.parse(after)))),
			COLUMNS,
		);
	},
);
