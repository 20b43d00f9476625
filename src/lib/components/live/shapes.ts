// Pure.
import type { Verdict } from '#lib/domain/reading.ts';
import type { MapRow, Finding } from '#lib/domain/tag-map/row.ts';
import type { Limit } from '#lib/domain/limit.ts';

/** Answers of the HTTP API as the pages read them; names as on the wire. */
export interface QualityJson {
	code: number;
	name: string;
	severity: 'good' | 'uncertain' | 'bad';
}
export interface LatestJson {
	tag: string;
	at: string | null;
	received_at: string | null;
	time_from: 'source' | 'hub' | null;
	value: number | null;
	unit: string;
	quality: QualityJson | null;
	verdict: Verdict;
	stale: boolean;
	test: boolean;
}
export interface TagJson {
	id: number;
	name: string;
	plant_tag?: string | null;
	description?: string | null;
	area?: string | null;
	machine?: string | null;
	point?: string | null;
	axis?: string | null;
	quantity?: string | null;
	unit: string;
	detector?: string | null;
	range?: { low?: number | null; high?: number | null } | null;
	source?: string | null;
	states?: string | null | Record<string, string>;
	limits?: Limit[];
	mapping?: Partial<MapRow> | null;
	retired?: boolean;
}
export interface AlarmJson {
	id: string | number;
	tag: string | null;
	source?: string | null;
	direction: string;
	kind: string;
	level: 'alert' | 'danger';
	level_now: 'alert' | 'danger' | null;
	state: 'active-unacknowledged' | 'active-acknowledged' | 'returned-unacknowledged' | 'closed';
	raised_at: string;
	cleared_at: string | null;
	acknowledged_at: string | null;
	acknowledged_by: string | null;
	value: number | null;
	limit: (Partial<Limit> & { unit?: string }) | null;
	unit?: string | null;
	test?: boolean;
	late?: boolean;
	suppressed?: number;
	uncertain?: boolean;
	note?: string | null;
	acknowledge_note?: string | null;
	machine?: string | null;
	point?: string | null;
	detector?: string | null;
	contact?: string | null;
	shelved_until?: string | null;
	shelved_by?: string | null;
	shelved_note?: string | null;
	out_of_service_until?: string | null;
	out_of_service_by?: string | null;
	out_of_service_note?: string | null;
}
export interface AdviceJson {
	code: string;
	text: string;
	check: string;
}
export interface HealthJson {
	state: 'ok' | 'late' | 'lost' | 'waiting' | 'off';
	since?: string | null;
	advice: AdviceJson | null;
	last_good_at: string | null;
	subscribed_at?: string | null;
	tags?: number | null;
	stale_tags?: number | null;
	[figure: string]: unknown;
}
export interface SourceJson {
	id: string;
	name: string;
	kind: 'opcua' | 'modbus' | 'mqtt';
	enabled: boolean;
	settings: Record<string, unknown>;
	contact?: string | null;
	notes?: string | null;
	health?: HealthJson | null;
	version?: number;
}
export interface MachineJson {
	id: number;
	name: string;
	area?: string | null;
	description?: string | null;
	data?: Record<string, unknown> | null;
	points?: { name: string; description?: string | null; data?: Record<string, unknown> | null }[];
	[field: string]: unknown;
}
export interface TrendItem {
	at: string;
	min: number | null;
	max: number | null;
	mean: number | null;
	n: number;
	worst: QualityJson | number | null;
}
export interface TrendJson {
	unit: string;
	bucket_s: number;
	limits: {
		kind: 'high' | 'low';
		level: 'alert' | 'danger';
		value: number;
		from: string;
		to: string | null;
		origin: string;
		note: string | null;
	}[];
	events: { at: string; kind: 'published' | 'limits'; revision: number; by: string; note: string }[];
	items: TrendItem[];
}
export interface Page<T> {
	items: T[];
	next: string | null;
}
export interface CheckJson {
	errors: Finding[];
	warnings: Finding[];
	version: number;
}
export type DraftRow = MapRow & { row_version?: number };
