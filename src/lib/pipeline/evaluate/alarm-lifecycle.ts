// Pure.
import type { AlarmState } from '#lib/domain/limit.ts';

/**
 * Where an alarm stands, from its own times [after ISA-18.2 / IEC 62682]:
 *
 *   active-unacknowledged ──acknowledge──▶ active-acknowledged ──returns──▶ closed
 *            │ returns                                                       ▲
 *            ▼                                                               │
 *   returned-unacknowledged ─────────────acknowledge─────────────────────────┘
 *
 * Shelved, suppressed and out of service are the tag's, not the alarm's. What was found behind live data asks nobody and is closed at once.
 */
export function alarmStateOf(alarm: { clearedAt: unknown; acknowledgedAt: unknown; isLate?: boolean }): AlarmState {
	const isCleared = alarm.clearedAt !== null && alarm.clearedAt !== undefined;
	const isAcknowledged = alarm.acknowledgedAt !== null && alarm.acknowledgedAt !== undefined;
	if (isCleared) return isAcknowledged || alarm.isLate ? 'closed' : 'returned-unacknowledged';
	return isAcknowledged ? 'active-acknowledged' : 'active-unacknowledged';
}
