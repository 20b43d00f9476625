// Pure.
import { ok, refuse, type Outcome } from '#lib/domain/outcome.ts';
import type { SourceKind } from '#lib/domain/source-settings.ts';
import type { Address } from '#lib/domain/tag-map/address.ts';
import { ROW_DEFAULTS, type Detector, type MapRow } from '#lib/domain/tag-map/row.ts';
import { parseStates } from '#lib/domain/tag-map/states.ts';
import type { PlannedLimit, TagPlan } from '#lib/domain/tag-map/tag-plan.ts';
import { compileConversion, type ConversionRefusal } from './units/convert.ts';

export interface CompileContext {
	siteId: number;
	sourceId: string;
	sourceKind: SourceKind;
	mqttPayload: 'json' | 'sparkplug' | null;
	timePolicy: 'source' | 'hub' | number;
	revision: number;
	limits: readonly PlannedLimit[];
	/** Tag id of a row of the same source, by name in any case. */
	tagIdByName(name: string): number | undefined;
}

/** Staleness unless the row says otherwise: three times the larger of interval and expected interval, at least this. */
const LEAST_STALE_S = 10;

/** The address of a row in its source's form. Refuses 'address-incomplete' for what the check of a draft would have found. */
export function addressOf(
	row: MapRow,
	kind: SourceKind,
	mqttPayload: 'json' | 'sparkplug' | null,
): Outcome<Address, 'address-incomplete'> {
	switch (kind) {
		case 'modbus': {
			if (row.unit_id == null || row.register == null || !row.table)
				return refuse('address-incomplete', 'unit_id, table and register are needed');
			return ok({
				kind: 'modbus',
				unitId: row.unit_id,
				table: row.table as 'coil',
				register: row.register,
				dataType: (row.data_type || 'bool') as 'bool',
				byteOrder: (row.byte_order || ROW_DEFAULTS.byte_order) as 'big',
				wordOrder: (row.word_order || ROW_DEFAULTS.word_order) as 'big',
				bit: row.bit ?? null,
			});
		}
		case 'opcua':
			if (!row.node_id) return refuse('address-incomplete', 'node_id is needed');
			return ok({ kind: 'opcua', nodeId: row.node_id, indexRange: row.index_range || null });
		case 'mqtt':
			if (mqttPayload === 'sparkplug') {
				if (!row.group_id || !row.edge_node_id || !row.metric)
					return refuse('address-incomplete', 'group_id, edge_node_id and metric are needed');
				return ok({
					kind: 'sparkplug',
					groupId: row.group_id,
					edgeNodeId: row.edge_node_id,
					deviceId: row.device_id || null,
					metric: row.metric,
				});
			}
			if (!row.topic) return refuse('address-incomplete', 'topic is needed');
			return ok({
				kind: 'mqtt',
				topic: row.topic,
				valuePointer: row.value_pointer || null,
				timePointer: row.time_pointer || null,
				qualityPointer: row.quality_pointer || null,
				timeFormat: (row.time_format || 'auto') as 'auto',
			});
	}
}

/** Compiles a published row: defaults in, names to ids, units to one line. Refuses what the check of a draft would have found. */
export function compileRow(
	row: MapRow & { id: number },
	context: CompileContext,
): Outcome<TagPlan, 'address-incomplete' | ConversionRefusal> {
	const address = addressOf(row, context.sourceKind, context.mqttPayload);
	if (!address.ok) return address;
	const unit = row.unit || '1';
	const detector = (row.detector || 'none') as Detector;
	const rawUnit = row.raw_unit || unit;
	const rawDetector = (row.raw_detector || detector) as Detector;
	const conversion = compileConversion({ rawUnit, rawDetector, unit, detector, frequencyHz: row.frequency_hz ?? null });
	if (!conversion.ok) return conversion;
	const intervalMs = row.interval_ms ?? ROW_DEFAULTS.interval_ms;
	const expectedEveryS = row.expected_every_s ?? null;
	const states = row.states ? parseStates(row.states) : null;
	const idOf = (name: string | null | undefined) => (name ? (context.tagIdByName(name) ?? null) : null);
	return ok({
		tagId: row.id,
		tag: row.tag,
		siteId: context.siteId,
		sourceId: context.sourceId,
		revision: context.revision,
		address: address.value,
		intervalMs,
		scale: row.scale ?? ROW_DEFAULTS.scale,
		offset: row.offset ?? ROW_DEFAULTS.offset,
		rawUnit,
		rawDetector,
		unit,
		detector,
		frequencyHz: row.frequency_hz ?? null,
		conversion: conversion.value,
		lowRange: row.low_range ?? null,
		highRange: row.high_range ?? null,
		deadband: row.deadband ?? null,
		expectedEveryS,
		staleAfterS: row.stale_after_s ?? Math.max(LEAST_STALE_S, 3 * Math.max(intervalMs / 1_000, expectedEveryS ?? 0)),
		frozenAfterS: row.frozen_after_s ?? null,
		timeTagId: idOf(row.time_tag),
		ageTagId: idOf(row.age_tag),
		validTagId: idOf(row.valid_tag),
		validWhen: row.valid_when || null,
		sentinels: row.sentinels ?? [],
		states: states?.ok ? states.value : null,
		timePolicy: context.timePolicy,
		limits: context.limits,
	});
}
