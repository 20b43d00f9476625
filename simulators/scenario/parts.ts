// Pure.
import type { Detector, Quantity } from '#lib/domain/tag-map/row.ts';

/** Through which device a signal reaches the outside. */
export type Gateway = 'a' | 'b' | 'broker' | 'sparkplug' | 'rtu';
export type Axis = 'horizontal' | 'vertical' | 'axial' | 'none';
export type SiteSlug = 'saltmere' | 'corran';

export interface Site {
	slug: SiteSlug;
	name: string;
	timeZone: string;
}
export interface Area {
	site: SiteSlug;
	name: string;
}
export interface Machine {
	site: SiteSlug;
	area: string;
	name: string;
	kind: 'pump-set' | 'blower' | 'refiner' | 'fan-pump' | 'felt-roll' | 'fan' | 'steam-trap';
	/** Rated power in kW; null where nothing turns. */
	powerKw: number | null;
	/** Rated speed in r/min; null where nothing turns. */
	speedRpm: number | null;
	/** ISO 20816-3 group; null where the standard does not reach. */
	isoGroup: 1 | 2 | null;
	foundation: 'rigid' | 'flexible' | null;
	orientation: 'horizontal' | 'vertical' | null;
	/** Vanes of the impeller or rotor. */
	vanes: number | null;
	/** ISO 10816-7 category of a pump. */
	pumpCategory: 'I' | 'II' | null;
}
export interface Point {
	site: SiteSlug;
	machine: string;
	/** Short name within the machine, such as MDE. */
	name: string;
	title: string;
	/** Whose zone table counts: that of the motor or of the pump. */
	part: 'motor' | 'driven' | 'process';
}
/** A wireless sensor at a point; all its values are of one measurement. */
export interface Sensor {
	site: SiteSlug;
	/** Machine and point, such as HL-3.MDE. */
	name: string;
	serial: string;
	machine: string;
	point: string;
	gateway: Gateway;
	periodMs: number;
}

/** How the physical value comes about; the model has one rule for each. */
export type Trait =
	| 'velocity'
	| 'once-per-turn'
	| 'vane-pass'
	| 'impact'
	| 'acceleration'
	| 'periodicity'
	| 'temperature'
	| 'battery'
	| 'radio'
	| 'age'
	| 'valid'
	| 'flow'
	| 'pressure'
	| 'power'
	| 'speed'
	| 'current'
	| 'level'
	| 'trap-temperature'
	| 'trap-state';

export interface Signal {
	/** Tag name and path in one, such as HL-3.MDE.H.VEL. */
	path: string;
	site: SiteSlug;
	gateway: Gateway;
	/** Sensor name; null for a wired value. */
	sensor: string | null;
	machine: string | null;
	area: string;
	point: string | null;
	axis: Axis;
	/** Null for what no quantity describes (an age). */
	quantity: Quantity | null;
	/** UCUM unit of the values read. */
	unit: string;
	detector: Detector;
	/** Range of the transmitter, in `unit`. */
	low: number;
	high: number;
	/** The device carries value / scale; 1 except where the gateway counts in hundredths or tenths. */
	scale: number;
	/** Name of a value on its device, such as the leaf of a path: H_VEL. */
	leaf: string;
	/** How often it is measured. */
	periodMs: number;
	trait: Trait;
	/** Middle of the healthy value, in the model's own unit. */
	normal: number;
	title: string;
}

export type Status = 'good' | 'bad' | 'frozen' | 'dead';
export interface PlantReading {
	/** In the signal's unit; null where the sensor gives no number, NaN where it gives that. */
	value: number | null;
	measuredAt: number;
	/** When the gateway had it; later than measured where the radio was away. */
	arrivedAt: number;
	status: Status;
}
