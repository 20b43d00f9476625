// Pure.
import type { AlarmJson } from '../live/shapes.ts';
import { pointWords } from '../overview/need-words.ts';
import type { GlyphState } from '../state/glyph-state.ts';
import { formatSpan } from '../state/format-time.ts';
import { counted, formatValue, limitText, unitText } from '../state/format-value.ts';

export const STATE_WORDS: Record<AlarmJson['state'], string> = {
	'active-unacknowledged': 'new',
	'active-acknowledged': 'acknowledged',
	'returned-unacknowledged': 'returned, not seen',
	closed: 'closed',
};

export function alarmGlyph(alarm: AlarmJson): GlyphState {
	return alarm.kind === 'stale' || alarm.kind === 'connection' ? 'stale' : (alarm.level_now ?? alarm.level);
}

/** What was so when it was raised, in one short line; of one that rose further, the limit that it reached. */
export function alarmFact(alarm: AlarmJson): string {
	if (alarm.kind === 'connection')
		return `lost${alarm.suppressed ? `; stands for ${counted(alarm.suppressed, 'stale tag')}` : ''}`;
	if (alarm.kind === 'stale') return 'no reading in its time';
	const value = alarm.value === null ? 'no value' : `${formatValue(alarm.value)} ${unitText(alarm.unit)}`.trim();
	const limit = alarm.limit?.value;
	if (limit == null) return `${value}; ${alarm.kind}`;
	const isFurther =
		alarm.value !== null &&
		((alarm.kind === 'high' && alarm.value < limit) || (alarm.kind === 'low' && alarm.value > limit)) &&
		alarm.level === 'danger';
	const words = isFurther ? `went on to the danger limit ${limitText(limit)}` : `${alarm.kind} limit ${limitText(limit)}`;
	return `${value}; ${words}${alarm.uncertain ? '; uncertain value' : ''}`;
}

const KIND_WORDS: Record<string, (limit: string, unit: string) => string> = {
	high: (limit, unit) => `is at or above ${limit} ${unit}`,
	low: (limit, unit) => `is at or below ${limit} ${unit}`,
	rate: (limit, unit) => `changes faster than ${limit} ${unit} a minute`,
	deviation: (limit) => `is more than ${limit} sigma away from its own baseline`,
	state: () => 'is in a state that calls for somebody',
	stale: () => 'has sent nothing for longer than it may',
};

/** What the alarm means, as a sentence for who does not read tag names. */
export function alarmMeaning(alarm: AlarmJson): string {
	if (alarm.kind === 'connection')
		return `No connection to ${alarm.source ?? 'a source'}. Values that come through it are old until it is back.`;
	const where = [alarm.machine, alarm.point ? pointWords(alarm.point) : null].filter(Boolean).join(', ') || alarm.tag;
	const limit = alarm.limit?.value == null ? 'its limit' : limitText(alarm.limit.value);
	const now = alarm.level_now === null ? 'was' : 'is';
	const says = (KIND_WORDS[alarm.kind] ?? KIND_WORDS.high!)(limit, unitText(alarm.unit, alarm.detector)).replace(/^is/, now);
	return `${where}: the value ${says.trim()}.`;
}

/** How long there is to respond: the moment it ends, and in words what is left of it at `now`. Null where the limit says none or all is done. */
export function timeToRespond(alarm: AlarmJson, now: number): { until: number; words: string; isOver: boolean } | null {
	const within = alarm.limit?.respond_within_s;
	if (within == null || alarm.state === 'closed') return null;
	const until = Date.parse(alarm.raised_at) + within * 1_000;
	const isOver = now >= until;
	return { until, isOver, words: isOver ? `over by ${formatSpan(now - until)}` : `${formatSpan(until - now)} left` };
}

/** Why nobody is called: shelved or out of service, with how long. Null where somebody is. */
export function quietMark(alarm: AlarmJson): 'shelved' | 'out of service' | null {
	if (alarm.out_of_service_until) return 'out of service';
	return alarm.shelved_until ? 'shelved' : null;
}
