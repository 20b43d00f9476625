// Edge: collector. May touch: source, tag, limit, latest and judging tables, to read.
import { modbusSettings, mqttSettings, opcuaSettings, type SourceKind } from '#lib/domain/source-settings.ts';
import type { MapRow } from '#lib/domain/tag-map/row.ts';
import type { PlannedLimit, TagPlan } from '#lib/domain/tag-map/tag-plan.ts';
import type { JudgingState } from '#lib/pipeline/evaluate/evaluate.ts';
import { compileRow } from '#lib/pipeline/normalize/compile-row.ts';
import type { LatestUpdate } from '#lib/pipeline/store/write-batch.ts';
import type { TagMemory } from '#lib/pipeline/tag-runtime.ts';
import type { Pool } from '#lib/server/db/pool.ts';
import { log } from '#lib/server/log.ts';

/** A source to run, with the tags that its published rows ask for. */
export interface SourcePlan {
	id: string;
	siteId: number;
	name: string;
	kind: SourceKind;
	version: number;
	/** Parsed settings, secrets included. */
	settings: Record<string, unknown>;
	plans: TagPlan[];
}

const SETTINGS = { opcua: opcuaSettings, modbus: modbusSettings, mqtt: mqttSettings } as const;

/** A short text that changes whenever something that a collector runs by has changed. */
export async function readFingerprint(pool: Pool): Promise<string> {
	const found = await pool.query<{ mark: string }>(
		`SELECT concat_ws('|', (SELECT string_agg(site_id || ':' || r, ',' ORDER BY site_id) FROM (SELECT site_id, max(revision) AS r FROM map_revisions GROUP BY 1) m),
			(SELECT string_agg(site_id || ':' || r, ',' ORDER BY site_id) FROM (SELECT site_id, max(revision) AS r FROM limit_revisions GROUP BY 1) l),
			(SELECT string_agg(id || ':' || version || enabled, ',' ORDER BY id) FROM sources WHERE deleted_at IS NULL)) AS mark`,
	);
	return found.rows[0]?.mark ?? '';
}

/** Everything published for the given sources, compiled. A row that cannot be compiled is left out and said in the log; the check keeps such rows out. */
export async function loadPlans(pool: Pool, sourceIds: readonly string[]): Promise<SourcePlan[]> {
	const sources = await pool.query<{
		id: string;
		site_id: number;
		name: string;
		kind: SourceKind;
		version: number;
		settings: Record<string, unknown>;
		secrets: Record<string, string>;
	}>(
		'SELECT id, site_id, name, kind, version, settings, secrets FROM sources WHERE id = ANY($1::uuid[]) AND enabled AND deleted_at IS NULL',
		[sourceIds],
	);
	const rows = await pool.query<{ id: number; source_id: string; row: MapRow; revision: number }>(
		'SELECT id, source_id, row, revision FROM tags WHERE source_id = ANY($1::uuid[]) AND published_at IS NOT NULL AND retired_at IS NULL ORDER BY id',
		[sourceIds],
	);
	const limitRows = await pool.query<Record<string, unknown> & { id: number; tag_id: number }>(
		`SELECT l.id, l.tag_id, l.kind, l.level, l.value, l.deadband, l.raise_after_s, l.clear_after_s, l.window_s, l.baseline, l.state
		 FROM limits l JOIN tags t ON t.id = l.tag_id WHERE t.source_id = ANY($1::uuid[]) AND l.to_revision IS NULL ORDER BY l.id`,
		[sourceIds],
	);
	const limits = new Map<number, PlannedLimit[]>();
	for (const { id, tag_id: tagId, ...limit } of limitRows.rows) {
		const list = limits.get(tagId) ?? [];
		list.push({ ...(limit as unknown as PlannedLimit), tag: '', limitId: id });
		limits.set(tagId, list);
	}
	const bySource = groupBySource(rows.rows);
	return sources.rows.flatMap((source) => {
		const parsed = SETTINGS[source.kind].safeParse({ ...source.settings, ...source.secrets });
		if (!parsed.success) {
			log.error(
				{ source: source.name, problems: parsed.error.issues.map((issue) => `${issue.path.join('.')}: ${issue.message}`) },
				'a source has settings that are not valid',
			);
			return [];
		}
		const settings = parsed.data;
		const own = bySource.get(source.id) ?? [];
		const ids = new Map(own.map(({ id, row }) => [row.tag.toLowerCase(), id]));
		const plans = own.flatMap(({ id, row, revision }) => {
			if (row.enabled === false) return [];
			const compiled = compileRow(
				{ ...row, id },
				{
					siteId: source.site_id,
					sourceId: source.id,
					sourceKind: source.kind,
					mqttPayload: 'payload' in settings ? settings.payload : null,
					timePolicy: settings.time_policy ?? 'source',
					revision,
					limits: limits.get(id) ?? [],
					tagIdByName: (name) => ids.get(name.toLowerCase()),
				},
			);
			if (compiled.ok) return [compiled.value];
			log.error({ tag: row.tag, reason: compiled.reason, detail: compiled.detail }, 'a published row cannot be run');
			return [];
		});
		return [
			{ id: source.id, siteId: source.site_id, name: source.name, kind: source.kind, version: source.version, settings, plans },
		];
	});
}

function groupBySource<T extends { source_id: string }>(rows: readonly T[]): Map<string, T[]> {
	const groups = new Map<string, T[]>();
	for (const row of rows) {
		const group = groups.get(row.source_id);
		if (group) group.push(row);
		else groups.set(row.source_id, [row]);
	}
	return groups;
}

/** What tags remembered when the last owner stopped. */
export async function loadMemories(pool: Pool, tagIds: readonly number[]): Promise<Map<number, TagMemory>> {
	const found = await pool.query<{
		id: number;
		state: JudgingState | null;
		at: Date | null;
		value: number | null;
		quality: number;
		received_at: Date;
		confirmed_at: Date;
		is_hub_time: boolean;
		source_at: Date | null;
		reason: string | null;
		raw: string | null;
		wire: string | null;
		verdict: LatestUpdate['verdict'];
		is_stale: boolean;
		revision: number;
	}>(
		`SELECT t.id, j.state, l.at, l.value, l.quality, l.received_at, l.confirmed_at, l.is_hub_time, l.source_at, l.reason, l.raw, l.wire, l.verdict, l.is_stale, l.revision
		 FROM unnest($1::int[]) AS t(id) LEFT JOIN judging_states j ON j.tag_id = t.id LEFT JOIN latest l ON l.tag_id = t.id`,
		[tagIds],
	);
	return new Map(
		found.rows.map((row) => [
			row.id,
			{
				judging: row.state,
				latest: row.at
					? {
							tagId: row.id,
							at: row.at.getTime(),
							value: row.value,
							quality: row.quality >>> 0,
							receivedAt: row.received_at.getTime(),
							confirmedAt: row.confirmed_at.getTime(),
							isHubTime: row.is_hub_time,
							sourceAt: row.source_at?.getTime() ?? null,
							reason: row.reason,
							raw: row.raw,
							wire: row.wire,
							verdict: row.verdict,
							isStale: row.is_stale,
							revision: row.revision,
							resets: false,
						}
					: null,
			},
		]),
	);
}
