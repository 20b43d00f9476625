// Pure.
import { counted, formatValue, limitText, unitText } from '../state/format-value.ts';

/** A need as the server lists it (src/lib/server/pulse/list-needs.ts). */
export interface Need {
	key: string;
	kind: 'alarm' | 'source' | 'battery' | 'draft';
	level: 'danger' | 'alert' | 'stale' | 'maintenance' | 'edit';
	since: string | null;
	acknowledgedAt: string | null;
	acknowledgedBy: string | null;
	alarm: {
		id: number;
		tag: string;
		kind: string;
		direction: string;
		machine: string | null;
		point: string | null;
		axis: string | null;
		quantity: string | null;
		unit: string;
		detector: string;
		raisedValue: number | null;
		value: number | null;
		alertAt: number | null;
		dangerAt: number | null;
		hasReturned: boolean;
		isTest: boolean;
		isUncertain: boolean;
		response: string | null;
		low: number | null;
		high: number | null;
	} | null;
	source: {
		id: string;
		name: string;
		state: string;
		text: string | null;
		check: string | null;
		stale: number;
		tags: number;
		alarmId: number | null;
	} | null;
	battery: { tag: string; machine: string | null; point: string | null; value: number; perDay: number | null } | null;
	draft: { changed: number; base: number; by: string | null } | null;
}

const POINTS: Readonly<Record<string, string>> = {
	MDE: 'motor drive end',
	MNDE: 'motor non-drive end',
	PDE: 'pump drive end',
	PNDE: 'pump non-drive end',
	FDE: 'fan drive end',
	FNDE: 'fan non-drive end',
	BDE: 'blower drive end',
};

/** A measuring point's short name in words where it is one of the trade's usual ones. */
export function pointWords(point: string): string {
	return POINTS[point.toUpperCase()] ?? point;
}

/** What it is about: `HL-3 motor drive end, horizontal`. */
export function needSubject(need: Need): string {
	const place = need.alarm ?? need.battery;
	if (need.source) return need.source.name;
	if (need.draft) return need.draft.base > 0 ? `Tag map, draft on revision ${need.draft.base}` : 'Tag map, first draft';
	if (!place) return '';
	if (!place.machine) return place.tag;
	const axis = need.alarm?.axis && need.alarm.axis !== 'none' ? `, ${need.alarm.axis}` : '';
	const subject = `${place.machine}${place.point ? ` ${pointWords(place.point)}` : ''}${axis}`;
	return need.battery ? `Sensor at ${subject}` : subject;
}

/** The fact in words, with figures. */
export function needFact(need: Need): string {
	if (need.alarm) return alarmFact(need.alarm);
	if (need.source) {
		const stale = need.source.stale > 0 ? `${counted(need.source.stale, 'tag')} stale` : null;
		const check = need.source.check?.replace(/\.$/, '').replace(/^[A-Z](?=[a-z])/, (first) => first.toLowerCase()) ?? null;
		return [need.source.text?.replace(/\.$/, '') ?? (need.source.state === 'lost' ? 'no answer' : 'answers late'), stale, check]
			.filter(Boolean)
			.join('; ');
	}
	if (need.battery) {
		const { value, perDay } = need.battery;
		const days = perDay !== null && perDay < 0 ? Math.floor(value / -perDay) : null;
		return `battery ${formatValue(value, { step: 1 })} %${days !== null ? `, about ${counted(days, 'day')} at the present rate` : ''}`;
	}
	if (need.draft) return `${counted(need.draft.changed, 'row')} changed, not published`;
	return '';
}

function alarmFact(alarm: NonNullable<Need['alarm']>): string {
	const resolution = { low: alarm.low, high: alarm.high };
	const say = (value: number) => formatValue(value, resolution);
	if (alarm.kind === 'stale') return 'no reading in its time';
	const parts: string[] = [];
	const shown = alarm.hasReturned ? alarm.raisedValue : (alarm.value ?? alarm.raisedValue);
	const what = alarm.quantity && alarm.quantity !== 'velocity' ? ` ${alarm.quantity.replaceAll('-', ' ')}` : '';
	if (alarm.kind === 'state') parts.push('is in its alarm state');
	else if (shown !== null) parts.push(`${say(shown)} ${unitText(alarm.unit, alarm.detector)}${what}`);
	const limits = [
		alarm.alertAt !== null ? `alert ${limitText(alarm.alertAt)}` : null,
		alarm.dangerAt !== null ? `danger ${limitText(alarm.dangerAt)}` : null,
	].filter(Boolean);
	if (limits.length > 0 && (alarm.kind === 'high' || alarm.kind === 'low')) parts.push(limits.join(', '));
	if (alarm.kind === 'rate') parts.push(alarm.direction === 'down' ? 'falls too fast' : 'rises too fast');
	if (alarm.kind === 'deviation') parts.push('away from its baseline');
	if (alarm.isUncertain) parts.push('raised by an uncertain value');
	return parts.join('; ');
}

/** Whose turn it is. */
export function needTurn(need: Need): string {
	switch (need.kind) {
		case 'alarm':
			return need.alarm?.kind === 'stale' ? 'Controls' : need.acknowledgedAt ? 'Analyst' : 'Maintenance';
		case 'source':
			return 'Controls';
		case 'battery':
			return 'Maintenance';
		case 'draft':
			return 'Integrator';
	}
}
