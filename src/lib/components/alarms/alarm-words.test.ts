import { expect, test } from 'vitest';
import type { AlarmJson } from '../live/shapes.ts';
import { alarmFact, alarmMeaning, timeToRespond } from './alarm-words.ts';

const alarm: AlarmJson = {
	id: 1,
	tag: 'HL-3.MDE.H.VEL',
	machine: 'HL-3',
	point: 'MDE',
	direction: 'up',
	kind: 'high',
	level: 'alert',
	level_now: 'alert',
	state: 'active-unacknowledged',
	raised_at: '2026-12-01T12:00:00.000Z',
	cleared_at: null,
	acknowledged_at: null,
	acknowledged_by: null,
	value: 4.53,
	unit: 'mm/s',
	detector: 'rms',
	limit: { value: 4.5, respond_within_s: 8 * 3_600 },
};

test('an alarm says what it means with machine, point, limit and unit', () => {
	expect(alarmMeaning(alarm)).toBe('HL-3, motor drive end: the value is at or above 4.5 mm/s rms.');
	expect(alarmMeaning({ ...alarm, level_now: null })).toContain('was at or above');
});

test('an alarm that rose further says so, since its first value is below the limit it reached', () => {
	expect(alarmFact(alarm)).toBe('4.53 mm/s; high limit 4.5');
	expect(alarmFact({ ...alarm, level: 'danger', limit: { value: 7.1 } })).toBe('4.53 mm/s; went on to the danger limit 7.1');
});

test('the time to respond counts from the raise, and says when it is over', () => {
	const raised = Date.parse(alarm.raised_at);
	expect(timeToRespond(alarm, raised + 3 * 3_600_000)).toMatchObject({ words: '5 h left', isOver: false });
	expect(timeToRespond(alarm, raised + 10 * 3_600_000)).toMatchObject({ words: 'over by 2 h', isOver: true });
	expect(timeToRespond({ ...alarm, state: 'closed' }, raised)).toBeNull();
	expect(timeToRespond({ ...alarm, limit: null }, raised)).toBeNull();
});
