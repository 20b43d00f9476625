// Pure.
/** Date and time with offset [RFC 3339 §5.6]. A lower-case t or z and a blank for T are allowed there. */
const RFC3339 = /^(\d{4})-(\d{2})-(\d{2})[Tt ](\d{2}):(\d{2}):(\d{2})(?:\.(\d+))?([Zz]|[+-]\d{2}:\d{2})$/;

/**
 * Milliseconds since the epoch of an RFC 3339 text, cut (not rounded) to the millisecond; null when it is none.
 * A leap second, 23:59:60, is taken as the last millisecond of its minute, so that it is neither lost nor put into the next day.
 */
export function parseRfc3339(text: string): number | null {
	const match = RFC3339.exec(text.trim());
	if (!match) return null;
	const [, year, month, day, hour, minute, second, fraction = '', offset = 'Z'] = match;
	const s = Number(second);
	if (Number(month) < 1 || Number(month) > 12 || Number(hour) > 23 || Number(minute) > 59 || s > 60) return null;
	const isLeap = s === 60;
	const ms = isLeap ? 999 : Number(fraction.padEnd(3, '0').slice(0, 3));
	const date = Date.UTC(Number(year), Number(month) - 1, Number(day), Number(hour), Number(minute), isLeap ? 59 : s, ms);
	if (new Date(date).getUTCDate() !== Number(day)) return null;
	if (/^[Zz]$/.test(offset)) return date;
	const minutes = Number(offset.slice(1, 3)) * 60 + Number(offset.slice(4, 6));
	if (Number(offset.slice(1, 3)) > 23 || Number(offset.slice(4, 6)) > 59) return null;
	return date - (offset.startsWith('-') ? -minutes : minutes) * 60_000;
}

export type TimeFormat = 'auto' | 's' | 'ms' | 'us' | 'ns' | 'rfc3339';

/**
 * Milliseconds since the epoch of a time as a payload carries it; null when it cannot be read as one.
 * `auto`: text is RFC 3339 with offset; numbers go by size: below 1e11 seconds, 1e14 milliseconds, 1e17 microseconds, else nanoseconds.
 */
export function parseTime(value: unknown, format: TimeFormat): number | null {
	if (format === 'rfc3339') return typeof value === 'string' ? parseRfc3339(value) : null;
	let count: number;
	if (typeof value === 'number') count = value;
	else if (typeof value === 'bigint') count = Number(value);
	else if (typeof value === 'string' && /^-?\d+(\.\d+)?$/.test(value.trim())) count = Number(value);
	else return format === 'auto' && typeof value === 'string' ? parseRfc3339(value) : null;
	if (!Number.isFinite(count)) return null;
	const unit = format === 'auto' ? unitBySize(Math.abs(count)) : format;
	const ms = unit === 's' ? count * 1_000 : unit === 'ms' ? count : unit === 'us' ? count / 1_000 : count / 1_000_000;
	// A double lies a hair off the millisecond it means: of nanoseconds today, up to 128 ns.
	return Math.floor(ms + 5e-4);
}

function unitBySize(size: number): 's' | 'ms' | 'us' | 'ns' {
	if (size < 1e11) return 's';
	if (size < 1e14) return 'ms';
	return size < 1e17 ? 'us' : 'ns';
}
