// Pure.

const MINUTE = 60_000;
const HOUR = 60 * MINUTE;

/** What happens by itself again and again, and can be asked for at once. Times in ms; phases counted from the epoch. */
interface EventPlan {
	everyMs: number;
	phaseMs: number;
	lastsMs: number;
	/** How long it takes to grow to full strength. */
	growsMs: number;
	/** Sensors or signals it touches, by the beginning of their path; empty for what a device does. */
	touches: readonly string[];
	title: string;
}

export const EVENTS = {
	'hl3-unbalance': plan(8 * HOUR, 0, 7.25 * HOUR, 6 * HOUR, ['HL-3'], 'HL-3 turns out of balance'),
	'hl2-lubrication': plan(24 * HOUR, 3 * HOUR, 18 * HOUR, 6 * HOUR, ['HL-2.MNDE'], 'HL-2 motor non-drive end runs dry'),
	'hl6-bearing': plan(36 * HOUR, 6 * HOUR, 24 * HOUR, 12 * HOUR, ['HL-6.PDE'], 'HL-6 pump bearing takes damage'),
	'll2-vane-pass': plan(2 * HOUR, 30 * MINUTE, 50 * MINUTE, 5 * MINUTE, ['LL-2'], 'LL-2 runs at less than 60 % of its flow'),
	'battery-low': plan(30 * 24 * HOUR, 0, 29 * 24 * HOUR, 29 * 24 * HOUR, ['LL-4.PDE'], 'the battery at LL-4 runs down'),
	'radio-fade': plan(90 * MINUTE, 40 * MINUTE, 7 * MINUTE, 0, ['HL-1.PDE'], 'the radio at HL-1 drops out, then sends late'),
	'dead-sensor': plan(6 * HOUR, 2 * HOUR, 45 * MINUTE, 0, ['HL-5.PNDE'], 'a sensor of HL-5 dies, its values stay standing'),
	freeze: plan(5 * HOUR, 1 * HOUR, 40 * MINUTE, 0, ['B-2.BDE.TEMP'], 'a temperature of B-2 freezes'),
	'not-a-number': plan(4 * HOUR, 90 * MINUTE, 10 * MINUTE, 0, ['HL-1.PNDE.HFP'], 'a value of HL-1 is not a number'),
	spike: plan(50 * MINUTE, 20 * MINUTE, MINUTE, 0, ['B-1.MDE.H.VEL'], 'one wild sample at B-1'),
	'trap-leak': plan(10 * HOUR, 0, 8 * HOUR, 30 * MINUTE, ['ST-6'], 'a steam trap blows through'),
	'modbus-exception': plan(3 * HOUR, 50 * MINUTE, 4 * MINUTE, 0, [], 'one register block answers exception 2'),
	'modbus-silence': plan(3 * HOUR, 54 * MINUTE, 2 * MINUTE, 0, [], 'the Modbus unit does not answer'),
	'opcua-restart': plan(4 * HOUR, 135 * MINUTE, 5_000, 0, [], 'the OPC UA server restarts'),
	'mqtt-drop': plan(2 * HOUR, 75 * MINUTE, 1_000, 0, [], 'the broker drops its connections'),
	'clock-fast': plan(12 * HOUR, 5 * HOUR, 20 * MINUTE, 0, [], 'the clock of gateway A is 400 s fast'),
} as const satisfies Record<string, EventPlan>;

export type EventName = keyof typeof EVENTS;
export const EVENT_NAMES = Object.keys(EVENTS) as EventName[];

/** How far the clock of `clock-fast` is ahead, in ms. */
export const CLOCK_FAST_MS = 400_000;

/** An event asked for by hand: at full strength at once unless it is told to grow. */
export interface Provoked {
	name: EventName;
	from: number;
	until: number;
	growsMs: number;
}
/** An event that stands at the moment asked for. */
export interface ActiveEvent {
	name: EventName;
	title: string;
	from: number;
	until: number;
	/** 0 to 1. */
	strength: number;
	provoked: boolean;
}

/** The stretch of the schedule that holds `at`; null between two. */
function scheduledAt(name: EventName, at: number): ActiveEvent | null {
	const event: EventPlan = EVENTS[name];
	const from = Math.floor((at - event.phaseMs) / event.everyMs) * event.everyMs + event.phaseMs;
	const until = from + event.lastsMs;
	if (at >= until) return null;
	return { name, title: event.title, from, until, strength: grown(at - from, event.growsMs), provoked: false };
}

/** Every event that stands at `at`; where one is both scheduled and provoked, the stronger. */
export function activeAt(at: number, provoked: readonly Provoked[], scheduled: boolean): ActiveEvent[] {
	return EVENT_NAMES.flatMap((name) => strengthOf(name, at, provoked, scheduled) ?? []);
}

/** The event at `at`, or null where it does not stand. */
export function strengthOf(name: EventName, at: number, provoked: readonly Provoked[], scheduled: boolean): ActiveEvent | null {
	let strongest = scheduled ? scheduledAt(name, at) : null;
	for (const one of provoked) {
		if (one.name !== name || at < one.from || at >= one.until) continue;
		const strength = grown(at - one.from, one.growsMs);
		if (strongest && strongest.strength > strength) continue;
		strongest = { name, title: EVENTS[name].title, from: one.from, until: one.until, strength, provoked: true };
	}
	return strongest;
}

/** Whether the event changes what this signal reads. */
export function touches(name: EventName, path: string): boolean {
	const starts: readonly string[] = EVENTS[name].touches;
	return starts.some((start) => path === start || path.startsWith(`${start}.`));
}

function grown(ageMs: number, growsMs: number): number {
	return growsMs <= 0 ? 1 : Math.min(1, ageMs / growsMs);
}

function plan(
	everyMs: number,
	phaseMs: number,
	lastsMs: number,
	growsMs: number,
	touched: readonly string[],
	title: string,
): EventPlan {
	return { everyMs, phaseMs, lastsMs, growsMs, touches: touched, title };
}
