// Edge: tag map. Reads draft rows once from their live sources; stores nothing. May touch: draft and source tables, sources for a moment.
import { join } from 'node:path';
import { modbusSettings, mqttSettings, opcuaSettings } from '#lib/domain/source-settings.ts';
import type { TagPlan } from '#lib/domain/tag-map/tag-plan.ts';
import { qualityJson } from '#lib/domain/quality.ts';
import { compileRow } from '#lib/pipeline/normalize/compile-row.ts';
import { toDryReading, type DryReading } from '#lib/pipeline/normalize/dry-reading.ts';
import { createSource } from '#lib/pipeline/sources/create-source.ts';
import { SourceError, type Sample } from '#lib/pipeline/sources/source.ts';
import { readConfig } from '#lib/server/config.ts';
import type { Db, Pool } from '#lib/server/db/pool.ts';
import { askCollector } from '#lib/server/source-setup/ask-collector.ts';
import { SOURCE_COLUMNS, type SourceRow } from '#lib/server/source-setup/source-record.ts';
import { findDraft } from './find-map.ts';

/** Most rows read in one dry run; more would hold up a device. */
export const MOST_ROWS = 500;
const READ_MS = 4_000;
/** A dry run samples this fast, whatever the row's own interval. */
const INTERVAL_MS = 500;
const SETTINGS = { opcua: opcuaSettings, modbus: modbusSettings, mqtt: mqttSettings } as const;

/**
 * What rows of the draft would read now: those named, or the changed ones. A source that runs is read by the collector that owns it,
 * over its own connection; another is opened briefly from here.
 */
export async function dryRun(db: Db, pool: Pool, siteId: number, tags: readonly string[] | undefined): Promise<DryReading[]> {
	const draft = await findDraft(db, siteId);
	const named = tags && new Set(tags.map((tag) => tag.toLowerCase()));
	const rows = draft.rows
		.filter((row) => row.state !== 'removed' && (named ? named.has(row.row.tag.toLowerCase()) : row.state !== 'published'))
		.slice(0, MOST_ROWS);
	const found = await pool.query<SourceRow>(`SELECT ${SOURCE_COLUMNS} FROM sources WHERE site_id = $1 AND deleted_at IS NULL`, [
		siteId,
	]);
	const sources = new Map(found.rows.map((source) => [source.name.toLowerCase(), source]));
	const answers: DryReading[] = [];
	const bySource = new Map<SourceRow, TagPlan[]>();
	for (const { row, id } of rows) {
		const source = sources.get((row.source ?? '').toLowerCase());
		const compiled = source
			? compileRow(
					// A key of its own, so that a running source does not take it for the published tag.
					{ ...row, id: -id, interval_ms: INTERVAL_MS },
					{
						siteId,
						sourceId: source.id,
						sourceKind: source.kind,
						mqttPayload: source.settings.payload === 'sparkplug' ? 'sparkplug' : 'json',
						timePolicy: 'source',
						revision: draft.revision,
						limits: [],
						tagIdByName: () => undefined,
					},
				)
			: null;
		if (source && compiled?.ok) bySource.set(source, [...(bySource.get(source) ?? []), compiled.value]);
		else
			answers.push(
				refusal(
					row.tag,
					row.unit ?? '',
					!source ? 'its source is not there' : compiled && !compiled.ok ? (compiled.detail ?? compiled.reason) : '',
				),
			);
	}
	const read = await Promise.all([...bySource].map(([source, plans]) => readSource(pool, source, plans)));
	return [...answers, ...read.flat()];
}

function refusal(tag: string, unit: string, detail: string): DryReading {
	return { tag, value: null, unit, quality: qualityJson(0x80890000), detail };
}

async function readSource(pool: Pool, source: SourceRow, plans: TagPlan[]): Promise<DryReading[]> {
	const asked = await askCollector(pool, source.id, 'read', { plans });
	if (asked.isRunning) {
		if ('items' in asked.answer) return asked.answer.items as DryReading[];
		return plans.map((plan) => refusal(plan.tag, plan.unit, String(asked.answer.error ?? 'the collector gave no answer')));
	}
	const stop = new AbortController();
	try {
		const samples = new Map<number, Sample>();
		const opened = await createSource(
			{
				id: `dry-run-${process.pid}-${Date.now()}`,
				kind: source.kind,
				settings: SETTINGS[source.kind].parse({ ...source.settings, ...source.secrets }),
			},
			{
				observer: { event: () => undefined, exchange: () => undefined, request: () => undefined, clockSkew: () => undefined },
				pkiFolder: join(readConfig().dataFolder, 'pki'),
				installationId: 'dry-run',
				now: () => Date.now(),
			},
		);
		const link = await opened.open(async (batch) => {
			for (const sample of batch) if (!samples.has(sample.key)) samples.set(sample.key, sample);
			return 'stored';
		}, stop.signal);
		await link.setAddresses(plans.map((plan) => ({ key: plan.tagId, address: plan.address, intervalMs: plan.intervalMs })));
		const deadline = Date.now() + READ_MS;
		while (samples.size < plans.length && Date.now() < deadline) await new Promise((resolve) => setTimeout(resolve, 50));
		stop.abort();
		await link.closed.catch(() => undefined);
		return plans.map((plan) => toDryReading(plan, samples.get(plan.tagId), Date.now()));
	} catch (error) {
		stop.abort();
		const words = error instanceof SourceError ? `${error.advice.text} ${error.advice.check}` : (error as Error).message;
		return plans.map((plan) => refusal(plan.tag, plan.unit, words));
	}
}
