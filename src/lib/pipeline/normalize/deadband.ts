// Pure.
/** What is remembered of a tag's last stored reading. */
export interface LastStored {
	at: number;
	value: number | null;
	quality: number;
}

/** A reading that arrives this long or more after the last stored one is stored, whatever the deadband. */
export const HEARTBEAT_MS = 600_000;

/**
 * Whether a reading goes into history. Deadband null stores every one; 0 only changes; above 0 only a move of more than the deadband from the last
 * stored value [strictly more, as OPC 10000-4 §7.22.2]. Always stored: a change of quality, a late reading, the first, and the first after ten minutes.
 */
export function shouldStore(
	reading: { at: number; value: number | null; quality: number },
	last: LastStored | null,
	deadband: number | null,
): boolean {
	if (deadband === null || last === null) return true;
	if (reading.quality !== last.quality) return true;
	if (reading.at <= last.at) return true;
	if (reading.at - last.at >= HEARTBEAT_MS) return true;
	if (reading.value === null || last.value === null) return reading.value !== last.value;
	return deadband === 0 ? reading.value !== last.value : Math.abs(reading.value - last.value) > deadband;
}

/** Percent deadband in the tag's unit: the percentage of the span [OPC 10000-8 §6.2]. Refuses by null what lies outside 0 to 100 or has no span. */
export function percentDeadband(percent: number, low: number | null, high: number | null): number | null {
	if (percent < 0 || percent > 100 || low === null || high === null) return null;
	return (percent / 100) * (high - low);
}
