// Pure.
import { activeAt, EVENTS, strengthOf, touches, type ActiveEvent, type EventName, type Provoked } from './events.ts';
import { AREAS, MACHINES, POINTS, SITES } from './layout.ts';
import { physicalValue } from './model.ts';
import { even } from './noise.ts';
import type { Area, Machine, PlantReading, Point, Sensor, Signal, Site } from './parts.ts';
import { SENSORS, SIGNALS } from './sensors.ts';

export interface ProvokeOptions {
	/** When it begins, in ms since the epoch. */
	at: number;
	/** How long it lasts; the plan's own length unless given. */
	lastsMs?: number;
	/** How long it takes to full strength; at once unless given. */
	growsMs?: number;
}

/** The demo plant: what every sensor measures at any moment, the same for the same seed and the same events. */
export interface Plant {
	readonly seed: number;
	readonly sites: readonly Site[];
	readonly areas: readonly Area[];
	readonly machines: readonly Machine[];
	readonly points: readonly Point[];
	readonly sensors: readonly Sensor[];
	readonly signals: readonly Signal[];
	signal(path: string): Signal | undefined;
	/** What the gateway holds for the path at `tMs`: the last measurement that reached it. Throws on an unknown path. */
	read(path: string, tMs: number): PlantReading;
	/** Measurements that reached the gateway in (afterMs, untilMs], oldest first; buffered ones come together and late. */
	arrivals(path: string, afterMs: number, untilMs: number): PlantReading[];
	/** Makes an event happen; returns it. */
	provoke(name: EventName, options: ProvokeOptions): Provoked;
	/** Ends what was provoked under the name. */
	calm(name: EventName): void;
	active(tMs: number): ActiveEvent[];
	/** The event if it stands at `tMs`. */
	event(name: EventName, tMs: number): ActiveEvent | null;
}

export interface PlantOptions {
	/** Whether events happen by themselves; off for tests that ask for each. */
	scheduled?: boolean;
}

/**
 * A plant that is a pure function of its seed, the time and the events provoked.
 * Every number is drawn by hashing the seed, the path and the count of the measurement, so that a restart changes nothing.
 */
export function createPlant(seed: number, options: PlantOptions = {}): Plant {
	const scheduled = options.scheduled ?? true;
	const provoked: Provoked[] = [];
	const byPath = new Map(SIGNALS.map((signal) => [signal.path, signal]));

	const find = (path: string): Signal => {
		const signal = byPath.get(path);
		if (!signal) throw new Error(`the plant has no signal ${path}`);
		return signal;
	};
	const stands = (name: EventName, signal: Signal, at: number): ActiveEvent | null =>
		touches(name, signal.path) ? strengthOf(name, at, provoked, scheduled) : null;

	/** Moment of the last measurement at or before `at`; sensors do not all measure at the same second. */
	const measuredBefore = (signal: Signal, at: number): { index: number; at: number } => {
		const phase = Math.floor(even(seed, 'phase', signal.sensor ?? signal.machine ?? signal.path) * signal.periodMs);
		const index = Math.floor((at - phase) / signal.periodMs);
		let moment = index * signal.periodMs + phase;
		// What is asked for by hand shows at once: the sensor measures when it begins.
		for (const one of provoked) {
			if (one.from > moment && one.from <= at && touches(one.name, signal.path)) moment = one.from;
		}
		return { index, at: moment };
	};

	const measure = (signal: Signal, moment: { index: number; at: number }, arrivedAt: number): PlantReading => {
		const strength = (name: EventName) => stands(name, signal, moment.at)?.strength ?? 0;
		const reading = (value: number | null, status: PlantReading['status'] = 'good'): PlantReading => ({
			value,
			measuredAt: moment.at,
			arrivedAt,
			status,
		});
		if (stands('not-a-number', signal, moment.at)) return reading(Number.NaN, 'bad');
		const frozen = stands('freeze', signal, moment.at);
		if (frozen) {
			const then = measuredBefore(signal, frozen.from - 1);
			return reading(
				physicalValue(seed, signal, then.index, then.at, () => 0),
				'frozen',
			);
		}
		const value = physicalValue(seed, signal, moment.index, moment.at, strength);
		return stands('spike', signal, moment.at) ? reading(signal.high * 1.6) : reading(value);
	};

	const read = (path: string, tMs: number): PlantReading => {
		const signal = find(path);
		const dead = stands('dead-sensor', signal, tMs);
		const away = stands('radio-fade', signal, tMs);
		const since = dead?.from ?? away?.from;
		const moment = measuredBefore(signal, since === undefined ? tMs : Math.min(tMs, since - 1));
		// After a fade the buffer is sent at once, so that the last of it came when the radio was back.
		const taken = measure(signal, moment, arrival(signal, moment.at));
		if (signal.trait === 'age') {
			return { ...taken, value: Math.min(65_534, Math.max(0, Math.floor((tMs - moment.at) / 1_000))) };
		}
		if (signal.trait === 'valid' && dead) return { ...taken, value: 0, status: 'dead' };
		return dead ? { ...taken, status: 'dead' } : taken;
	};

	const arrival = (signal: Signal, measuredAt: number): number => stands('radio-fade', signal, measuredAt)?.until ?? measuredAt;

	const arrivals = (path: string, afterMs: number, untilMs: number): PlantReading[] => {
		const signal = find(path);
		const found: PlantReading[] = [];
		const reach = EVENTS['radio-fade'].lastsMs;
		const longest = Math.max(reach, ...provoked.filter((one) => one.name === 'radio-fade').map((one) => one.until - one.from));
		let cursor = untilMs;
		while (cursor > afterMs - longest) {
			const moment = measuredBefore(signal, cursor);
			cursor = moment.at - 1;
			if (stands('dead-sensor', signal, moment.at)) continue;
			const arrivedAt = arrival(signal, moment.at);
			if (arrivedAt > afterMs && arrivedAt <= untilMs) found.push(measure(signal, moment, arrivedAt));
		}
		return found.reverse();
	};

	return {
		seed,
		sites: SITES,
		areas: AREAS,
		machines: MACHINES,
		points: POINTS,
		sensors: SENSORS,
		signals: SIGNALS,
		signal: (path) => byPath.get(path),
		read,
		arrivals,
		provoke(name, { at, lastsMs = EVENTS[name].lastsMs, growsMs = 0 }) {
			const one: Provoked = { name, from: at, until: at + lastsMs, growsMs };
			provoked.push(one);
			return one;
		},
		calm(name) {
			for (let index = provoked.length - 1; index >= 0; index--) {
				if (provoked[index]?.name === name) provoked.splice(index, 1);
			}
		},
		active: (tMs) => activeAt(tMs, provoked, scheduled),
		event: (name, tMs) => strengthOf(name, tMs, provoked, scheduled),
	};
}
