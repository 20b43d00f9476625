// Pure.
import { isGood, statusNameOf } from '#lib/domain/quality.ts';
import type { SourceKind } from '#lib/domain/source-settings.ts';
import { registersOf, type Address } from '#lib/domain/tag-map/address.ts';
import type { MapRow } from '#lib/domain/tag-map/row.ts';
import type { TagPlan } from '#lib/domain/tag-map/tag-plan.ts';
import type { Trace, TraceHop } from '#lib/domain/trace.ts';
import { compileRow } from '#lib/pipeline/normalize/compile-row.ts';
import { rebuildRaw } from '#lib/pipeline/normalize/raw-to-store.ts';
import { unitLabel } from '#lib/pipeline/normalize/units/quantity.ts';
import { otherDecodings } from './other-decodings.ts';

/** What is known of a value's way; times in milliseconds. */
export interface KnownWay {
	tagId: number;
	tag: string;
	unit: string;
	detector: string;
	row: MapRow;
	revision: number;
	at: number;
	receivedAt: number;
	storedAt: number | null;
	sourceAt: number | null;
	isHubTime: boolean;
	value: number | null;
	quality: number;
	reason: string | null;
	raw: string | null;
	wire: string | null;
	verdict: string | null;
	source: { id: string; name: string; kind: string } | null;
	readers: readonly { name: string; position: number; readAt: number }[];
}

const iso = (ms: number) => new Date(ms).toISOString();
/** As much of a number as tells it apart, for a formula; never used to compute. */
const short = (value: number) => String(Number(value.toPrecision(8)));

/** Where the address points, in one short line, and what else it says. */
function placeOf(address: Address): { label: string; detail: string } {
	switch (address.kind) {
		case 'modbus': {
			const last = address.register + registersOf(address.dataType) - 1;
			const isBit = address.table === 'coil' || address.table === 'discrete-input';
			const what = isBit ? address.table : last > address.register ? 'registers' : 'register';
			return {
				label: last > address.register ? `${what} ${address.register}–${last}` : `${what} ${address.register}`,
				detail: isBit ? `unit ${address.unitId}` : `unit ${address.unitId}, ${address.table}`,
			};
		}
		case 'opcua':
			return { label: address.nodeId, detail: address.indexRange ? `elements ${address.indexRange}` : 'node' };
		case 'mqtt':
			return { label: address.topic, detail: address.valuePointer ? `at ${address.valuePointer}` : 'whole payload' };
		case 'sparkplug':
			return {
				label: address.metric,
				detail: [address.groupId, address.edgeNodeId, address.deviceId].filter(Boolean).join(' / '),
			};
	}
}

/** How the bytes become one number, in words. */
function decodingOf(address: Address): { label: string; detail: string } {
	if (address.kind !== 'modbus')
		return { label: 'as sent', detail: address.kind === 'mqtt' ? 'number by JSON’s grammar' : 'typed by the source' };
	const words = registersOf(address.dataType) > 1 ? `${address.wordOrder === 'big' ? 'high' : 'low'} word first` : 'one register';
	const bytes = address.byteOrder === 'little' ? ', bytes swapped' : '';
	return { label: address.bit === null ? address.dataType : `${address.dataType}, bit ${address.bit}`, detail: words + bytes };
}

interface Numbers {
	raw: number | string | null;
	isRawCaptured: boolean;
	scaled: number | null;
}

/** The raw scalar as kept, or rebuilt by the row's inverse, and what scaling makes of it. */
function numbersOf(way: KnownWay, plan: TagPlan | null): Numbers {
	const kept = way.raw;
	if (kept !== null) {
		const number = Number(kept);
		const isNumber = kept.trim() !== '' && Number.isFinite(number);
		// A 64-bit integer beyond 2^53 stays the text it is: a number would round it.
		const raw = isNumber && Math.abs(number) <= Number.MAX_SAFE_INTEGER ? number : kept;
		return { raw, isRawCaptured: true, scaled: isNumber && plan ? number * plan.scale + plan.offset : null };
	}
	if (way.value === null || !plan) return { raw: null, isRawCaptured: false, scaled: null };
	const raw = rebuildRaw(way.value, plan);
	return { raw, isRawCaptured: false, scaled: raw * plan.scale + plan.offset };
}

function planOf(way: KnownWay): TagPlan | null {
	if (!way.source) return null;
	const compiled = compileRow(
		{ ...way.row, id: way.tagId },
		{
			siteId: 0,
			sourceId: way.source.id,
			sourceKind: way.source.kind as SourceKind,
			mqttPayload: way.row.metric ? 'sparkplug' : 'json',
			timePolicy: 'source',
			revision: way.revision,
			limits: [],
			tagIdByName: () => undefined,
		},
	);
	return compiled.ok ? compiled.value : null;
}

/** The stations of one value's way, from the wire to each reader, each said to be as captured or rebuilt. */
export function layHops(way: KnownWay): Trace {
	const plan = planOf(way);
	const { raw, isRawCaptured, scaled } = numbersOf(way, plan);
	const place = plan ? placeOf(plan.address) : { label: 'address', detail: 'not known any more' };
	const decoding = plan ? decodingOf(plan.address) : { label: 'decoded', detail: '' };
	const unit = unitLabel(way.unit, way.detector);
	const rawUnit = plan ? unitLabel(plan.rawUnit, plan.rawDetector) : null;
	const scale = plan?.scale ?? 1;
	const offset = plan?.offset ?? 0;
	const line = plan?.conversion ?? { factor: 1, offset: 0 };
	const scaling = `× ${short(scale)} ${offset < 0 ? '−' : '+'} ${short(Math.abs(offset))}`;
	const conversion =
		line.offset === 0
			? `× ${short(line.factor)}`
			: `× ${short(line.factor)} ${line.offset < 0 ? '−' : '+'} ${short(Math.abs(line.offset))}`;
	const rawNumber = typeof raw === 'number' ? raw : null;
	const low = way.row.low_range ?? null;
	const high = way.row.high_range ?? null;
	const range = low === null && high === null ? 'no range given' : `range ${low ?? '…'}–${high ?? '…'} ${unit}`;
	const isSameUnit = line.factor === 1 && line.offset === 0;

	const hops: TraceHop[] = [
		{
			hop: 'wire',
			label: place.label,
			before: null,
			after: way.wire,
			unit: null,
			detail: [way.source?.name, place.detail].filter(Boolean).join(', '),
			formula: null,
			at: iso(way.receivedAt),
			captured: way.wire !== null,
			mark: null,
		},
		{
			hop: 'decode',
			label: decoding.label,
			before: way.wire,
			after: raw,
			unit: null,
			detail: decoding.detail,
			formula: null,
			at: iso(way.receivedAt),
			captured: isRawCaptured,
			mark: null,
		},
		{
			hop: 'scale',
			label: scaling,
			before: raw,
			after: scaled,
			unit: scaled === null ? null : rawUnit,
			detail: scale === 1 && offset === 0 ? 'as it is' : 'by the tag map',
			formula: rawNumber === null || scaled === null ? null : `${short(rawNumber)} ${scaling}`,
			at: null,
			captured: false,
			mark: rawNumber !== null && scaled !== null && scaled !== rawNumber ? 'changed' : null,
		},
		{
			hop: 'convert',
			label: isSameUnit ? 'unit as it is' : `${rawUnit} to ${unit}`,
			before: scaled,
			after: way.value,
			unit: way.value === null ? null : unit,
			detail: isSameUnit ? unit : conversion,
			formula: scaled === null ? null : `${short(scaled)} ${conversion}`,
			at: null,
			captured: false,
			mark: !isSameUnit && way.value !== null ? 'changed' : null,
		},
		{
			hop: 'quality',
			label: statusNameOf(way.quality),
			before: null,
			after: statusNameOf(way.quality),
			unit: null,
			detail: way.reason ?? range,
			formula: null,
			at: iso(way.at),
			captured: true,
			mark: isGood(way.quality) ? null : 'spoiled',
		},
		{
			hop: 'verdict',
			label: way.verdict ?? 'not kept',
			before: way.value,
			after: way.verdict,
			unit: null,
			detail: way.verdict === null ? 'verdicts are kept for the latest value only' : 'against the limits in force',
			formula: null,
			at: null,
			captured: way.verdict !== null,
			mark: way.verdict === 'alert' || way.verdict === 'danger' ? way.verdict : null,
		},
		{
			hop: 'stored',
			label: `revision ${way.revision}`,
			before: way.value,
			after: way.value,
			unit: way.value === null ? null : unit,
			detail: way.isHubTime ? `read ${iso(way.at)}` : `measured ${iso(way.at)}`,
			formula: null,
			at: way.storedAt === null ? null : iso(way.storedAt),
			captured: true,
			mark: null,
		},
		...way.readers.map((reader): TraceHop => ({
			hop: 'feed',
			label: reader.name,
			before: way.value,
			after: way.value,
			unit: way.value === null ? null : unit,
			detail: `has read up to ${reader.position}`,
			formula: null,
			at: iso(reader.readAt),
			captured: false,
			mark: null,
		})),
	];
	return {
		tag: way.tag,
		at: iso(way.at),
		time_from: way.isHubTime ? 'hub' : 'source',
		revision: way.revision,
		value: way.value,
		unit: way.unit,
		hops,
		decodings: plan ? otherDecodings(way.wire, rawNumber, plan) : [],
	};
}
