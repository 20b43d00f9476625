// Pure.

const formatters = new Map<string, Intl.DateTimeFormat>();

function partsOf(ms: number, timeZone: string): Record<string, string> {
	let format = formatters.get(timeZone);
	if (!format) {
		const options: Intl.DateTimeFormatOptions = {
			timeZone,
			year: 'numeric',
			month: 'short',
			day: 'numeric',
			weekday: 'short',
			hour: '2-digit',
			minute: '2-digit',
			second: '2-digit',
			hourCycle: 'h23',
		};
		format = new Intl.DateTimeFormat('en-GB', options);
		formatters.set(timeZone, format);
	}
	return Object.fromEntries(format.formatToParts(ms).map((part) => [part.type, part.value]));
}

export type TimeForm = 'clock' | 'minute' | 'exact' | 'day' | 'full';

/**
 * A moment in the site's zone. `clock` 14:22:05, `minute` 14:22, `exact` 14:22:05.082, `day` 30 Nov,
 * `full` 30 Nov 2026 14:22:05. `clock` and `minute` put the day in front when it is not today.
 */
export function formatTime(ms: number, timeZone: string, form: TimeForm, now: number): string {
	const p = partsOf(ms, timeZone);
	const today = partsOf(now, timeZone);
	const day = `${p.day} ${p.month?.slice(0, 3)}`;
	const minute = `${p.hour}:${p.minute}`;
	const isToday = p.year === today.year && p.month === today.month && p.day === today.day;
	const lead = isToday ? '' : p.year === today.year ? `${day} ` : `${day} ${p.year} `;
	switch (form) {
		case 'clock':
			return `${lead}${minute}:${p.second}`;
		case 'minute':
			return `${lead}${minute}`;
		case 'exact':
			return `${lead}${minute}:${p.second}.${String(new Date(ms).getUTCMilliseconds()).padStart(3, '0')}`;
		case 'day':
			return p.year === today.year ? day : `${day} ${p.year}`;
		case 'full':
			return `${day} ${p.year} ${minute}:${p.second}`;
	}
}

/** Short name of the zone at that moment: GMT, BST, GMT+5:45. */
export function zoneName(ms: number, timeZone: string): string {
	const parts = new Intl.DateTimeFormat('en-GB', { timeZone, timeZoneName: 'short' }).formatToParts(ms);
	return parts.find((part) => part.type === 'timeZoneName')?.value ?? timeZone;
}

/** UTC with milliseconds, for the title of every time shown. */
export function utcText(ms: number): string {
	return `${new Date(ms).toISOString().replace('T', ' ').replace('Z', '')} UTC`;
}

/** A span in the two largest words that matter: 14 s, 13 min, 4 h, 3 d. */
export function formatSpan(ms: number): string {
	const seconds = Math.max(0, ms) / 1_000;
	if (seconds < 1) return `${Math.round(seconds * 1_000)} ms`;
	if (seconds < 90) return `${Math.floor(seconds)} s`;
	if (seconds < 5_400) return `${Math.floor(seconds / 60)} min`;
	if (seconds < 129_600) return `${Math.floor(seconds / 3_600)} h`;
	return `${Math.floor(seconds / 86_400)} d`;
}
