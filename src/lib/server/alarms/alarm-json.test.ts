import { expect, it } from 'vitest';
import { alarmStateOf } from './alarm-json.ts';

const then = new Date(0);

it.each([
	['raised and seen by nobody', null, null, false, 'active-unacknowledged'],
	['acknowledged while it stands', null, then, false, 'active-acknowledged'],
	['gone before anybody saw it', then, null, false, 'returned-unacknowledged'],
	['gone and acknowledged', then, then, false, 'closed'],
	['found afterwards, already over', then, null, true, 'closed'],
] as const)('an alarm %s is in its state', (_what, clearedAt, acknowledgedAt, isLate, state) => {
	expect(alarmStateOf({ clearedAt, acknowledgedAt, isLate })).toBe(state);
});
