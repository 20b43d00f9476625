// Pure.
/** Date, `T` or `t` (or a space), time, fraction, and `Z` or an offset: all of them required [RFC 3339 §5.6]. */
const FORM = /^(\d{4})-(\d{2})-(\d{2})[Tt ](\d{2}):(\d{2}):(\d{2})(?:\.(\d+))?([Zz]|[+-]\d{2}:\d{2})$/;

/**
 * Milliseconds since the epoch of an RFC 3339 time, or null for anything else. Finer fractions are cut, not rounded.
 * A space where the offset's plus sign was is taken for it: that is what an unescaped `+` in a query string becomes.
 */
export function parseRfc3339(input: string): number | null {
	const match = FORM.exec(input.replace(/ (\d{2}:\d{2})$/, '+$1'));
	if (!match) return null;
	const [, year, month, day, hour, minute, second, fraction, offset] = match;
	if (!year || !month || !day || !hour || !minute || !second || !offset) return null;
	if (Number(hour) > 23 || Number(minute) > 59 || Number(second) > 59) return null;
	const wall = new Date(0);
	wall.setUTCFullYear(Number(year), Number(month) - 1, Number(day));
	wall.setUTCHours(Number(hour), Number(minute), Number(second), Number((fraction ?? '').padEnd(3, '0').slice(0, 3)));
	// A day that the month does not have rolls over; then it was not a date.
	if (wall.getUTCMonth() !== Number(month) - 1 || wall.getUTCDate() !== Number(day)) return null;
	if (offset === 'Z' || offset === 'z') return wall.getTime();
	const offsetHour = Number(offset.slice(1, 3));
	const offsetMinute = Number(offset.slice(4, 6));
	if (offsetHour > 23 || offsetMinute > 59) return null;
	const sign = offset.startsWith('-') ? -1 : 1;
	return wall.getTime() - sign * (offsetHour * 60 + offsetMinute) * 60_000;
}

/** Milliseconds since the epoch as the API writes times: UTC with milliseconds. */
export function toRfc3339(ms: number): string {
	return new Date(ms).toISOString();
}
