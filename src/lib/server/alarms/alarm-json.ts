// Pure.
import { z } from 'zod';
import { ALARM_STATES, type AlarmState } from '#lib/domain/limit.ts';
import { limitJson, toLimitJson, type LimitColumns } from '#lib/server/limits/limit-json.ts';

const time = z.iso.datetime();

export const alarmJson = z.object({
	id: z.number().int(),
	/** Null for an alarm of a source's connection. */
	tag: z.string().nullable(),
	source: z.string().nullable(),
	machine: z.string().nullable(),
	point: z.string().nullable(),
	/** The detector that goes with `unit`. */
	detector: z.string().nullable(),
	/** Whom to call: as the machine says, else as its source does. */
	contact: z.string().nullable(),
	direction: z.enum(['up', 'down', 'state', 'stale', 'connection']),
	kind: z.enum(['high', 'low', 'rate', 'deviation', 'stale', 'state', 'connection']),
	level: z.enum(['alert', 'danger']),
	level_now: z.enum(['alert', 'danger']).nullable(),
	state: z.enum(ALARM_STATES),
	raised_at: time,
	cleared_at: time.nullable(),
	acknowledged_at: time.nullable(),
	acknowledged_by: z.string().nullable(),
	acknowledge_note: z.string().nullable(),
	value: z.number().nullable(),
	unit: z.string().nullable(),
	limit: limitJson.nullable(),
	/** The reading that raised it was uncertain. */
	uncertain: z.boolean(),
	/** Found behind live data; nobody was called. */
	late: z.boolean(),
	test: z.boolean(),
	/** Stale alarms that this connection alarm stands for. */
	suppressed: z.number().int(),
	shelved_until: time.nullable(),
	shelved_by: z.string().nullable(),
	shelved_note: z.string().nullable(),
	/** Judged all the same; nobody is called. */
	out_of_service_until: time.nullable(),
	out_of_service_by: z.string().nullable(),
	out_of_service_note: z.string().nullable(),
});
export type AlarmJson = z.infer<typeof alarmJson>;

/** State by ISA-18.2's words: its condition, and whether somebody has acknowledged it. What was found afterwards asks for nobody. */
export function alarmStateOf(alarm: { clearedAt: Date | null; acknowledgedAt: Date | null; isLate: boolean }): AlarmState {
	if (alarm.clearedAt === null) return alarm.acknowledgedAt === null ? 'active-unacknowledged' : 'active-acknowledged';
	return alarm.acknowledgedAt === null && !alarm.isLate ? 'returned-unacknowledged' : 'closed';
}

/** An alarm as the database joins it. */
export interface AlarmRow {
	id: number;
	tag: string | null;
	unit: string | null;
	source: string | null;
	machine: string | null;
	point: string | null;
	detector: string | null;
	contact: string | null;
	direction: AlarmJson['direction'];
	kind: AlarmJson['kind'];
	level: 'alert' | 'danger';
	levelNow: 'alert' | 'danger' | null;
	raisedAt: Date;
	clearedAt: Date | null;
	acknowledgedAt: Date | null;
	acknowledgedBy: string | null;
	acknowledgeNote: string | null;
	raisedValue: number | null;
	isUncertain: boolean;
	isLate: boolean;
	isTest: boolean;
	suppressedCount: number;
	shelvedUntil: Date | null;
	shelvedBy: string | null;
	shelvedNote: string | null;
	outOfServiceUntil: Date | null;
	outOfServiceBy: string | null;
	outOfServiceNote: string | null;
	limit: LimitColumns | null;
}

/** An alarm as answers show it; `limit` is the one it met, as it stood then. */
export function toAlarmJson(row: AlarmRow, now: Date): AlarmJson {
	const isShelved = row.shelvedUntil !== null && row.shelvedUntil > now;
	const isOut = row.outOfServiceUntil !== null && row.outOfServiceUntil > now;
	return {
		id: row.id,
		tag: row.tag,
		source: row.source,
		machine: row.machine,
		point: row.point,
		detector: row.detector,
		contact: row.contact,
		direction: row.direction,
		kind: row.kind,
		level: row.level,
		level_now: row.levelNow,
		state: alarmStateOf(row),
		raised_at: row.raisedAt.toISOString(),
		cleared_at: row.clearedAt?.toISOString() ?? null,
		acknowledged_at: row.acknowledgedAt?.toISOString() ?? null,
		acknowledged_by: row.acknowledgedBy,
		acknowledge_note: row.acknowledgeNote,
		value: row.raisedValue,
		unit: row.unit,
		limit: row.limit && row.tag !== null ? toLimitJson(row.tag, row.limit) : null,
		uncertain: row.isUncertain,
		late: row.isLate,
		test: row.isTest,
		suppressed: row.suppressedCount,
		shelved_until: isShelved ? (row.shelvedUntil?.toISOString() ?? null) : null,
		shelved_by: isShelved ? row.shelvedBy : null,
		shelved_note: isShelved ? row.shelvedNote : null,
		out_of_service_until: isOut ? (row.outOfServiceUntil?.toISOString() ?? null) : null,
		out_of_service_by: isOut ? row.outOfServiceBy : null,
		out_of_service_note: isOut ? row.outOfServiceNote : null,
	};
}
