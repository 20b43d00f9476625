// Pure.
import type { Retention } from '#lib/domain/retention.ts';

/** Kinds of stored data as the page names them. */
export const KIND_WORDS: Readonly<
	Record<'rows' | 'blocks' | 'minute' | 'hour' | 'journal' | 'rest', { name: string; note: string }>
> = {
	rows: { name: 'Recent readings', note: 'as rows' },
	blocks: { name: 'Packed readings', note: 'by tag and hour' },
	minute: { name: '1-minute roll-ups', note: '' },
	hour: { name: '1-hour roll-ups', note: '' },
	journal: { name: 'Feed journal', note: 'what cursors reach back to' },
	rest: { name: 'The rest', note: 'map, alarms, audit, logs' },
};

export const RETENTION_WORDS: Readonly<Record<keyof Retention, { label: string; hint: string }>> = {
	rowDays: { label: 'Rows before packing', hint: 'at least 3; nothing is lost by packing' },
	rawDays: { label: 'Raw readings', hint: 'older ones are set aside on arrival' },
	minuteDays: { label: '1-minute roll-ups', hint: '' },
	hourDays: { label: '1-hour roll-ups', hint: '' },
	journalDays: { label: 'Feed journal', hint: 'a receiver may be away so long' },
	exchangeDays: { label: 'Exchanges around failures', hint: '' },
};

const DAY = new Intl.DateTimeFormat('en-GB', { day: 'numeric', month: 'short', year: 'numeric', timeZone: 'UTC' });

/** `24 Nov 2026` of a day or time in UTC; days of the store are UTC days. */
export function dayText(day: string | null): string {
	return day === null ? 'no day' : DAY.format(new Date(day));
}

/** A span of days, in years where it is long. */
export function daysText(days: number): string {
	if (days >= 730) return `${(days / 365.25).toFixed(days % 365 < 1 || days >= 3_650 ? 0 : 1)} years`;
	const whole = days < 10 && days % 1 !== 0 ? days.toFixed(1) : String(Math.round(days));
	return `${whole} ${whole === '1' ? 'day' : 'days'}`;
}
