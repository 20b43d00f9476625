// Edge: store page. May touch: store finders, retention rules, the database volume's free bytes.
import { statfs } from 'node:fs/promises';
import { forecastStore, type StoreForecast, type StoreKind } from '#lib/domain/store-forecast.ts';
import type { Retention } from '#lib/domain/retention.ts';
import { readConfig } from '#lib/server/config.ts';
import type { Pool } from '#lib/server/db/pool.ts';
import { findStoreSize, type StoreKindName, type StoreSize } from '#lib/pipeline/store/find-store-size.ts';
import { readRetention } from '#lib/pipeline/store/retention.ts';

const DAY_MS = 86_400_000;
/** Of a packed reading before one was packed here; what the demo's signals take. */
const USUAL_BYTES = 10;

export interface KindLine {
	kind: StoreKindName;
	bytes: number;
	/** Null for what has no retention. */
	keepDays: number | null;
	heldDays: number | null;
	bytesPerDay: number | null;
}

export interface RuleLine {
	id: number;
	site: string | null;
	quantity: string | null;
	rawDays: number;
	tags: number;
}

export interface StoreReport {
	at: number;
	bytes: number;
	freeBytes: number | null;
	kinds: KindLine[];
	forecast: StoreForecast;
	readingsPerDay: number | null;
	bytesPerRow: number | null;
	bytesPerPacked: number | null;
	oldestDay: string | null;
	newestDay: string | null;
	/** Days that are old enough and still rows. */
	daysDue: number;
	size: StoreSize;
	retention: Retention;
	rules: RuleLine[];
}

/** Everything that the administrator's page of the store shows. */
export async function readStore(pool: Pool, now: number): Promise<StoreReport> {
	const [size, retention, rules, freeBytes] = await Promise.all([
		findStoreSize(pool),
		readRetention(pool),
		listRules(pool),
		findFreeBytes(),
	]);
	const today = new Date(now).toISOString().slice(0, 10);
	const recent = recentDays(size, today);
	const readingsPerDay = recent.length === 0 ? null : recent.reduce((sum, n) => sum + n, 0) / recent.length;
	const inRows = size.rowDays.reduce((sum, one) => sum + one.readings, 0);
	const bytesPerRow = inRows >= 1_000 ? size.bytes.rows / inRows : null;
	const packed = size.packedDays.slice(0, 14);
	const inBlocks = packed.reduce((sum, one) => sum + one.readings, 0);
	const bytesPerPacked = inBlocks >= 1_000 ? packed.reduce((sum, one) => sum + one.bytes, 0) / inBlocks : null;

	const oldestDay = oldestOf(size);
	// A month's or week's table may begin before its first row.
	const held = (kind: keyof StoreSize['since']) => {
		const since = size.since[kind];
		const begin = Math.max(since ?? 0, kind === 'journal' || oldestDay === null ? 0 : Date.parse(oldestDay));
		return since === null ? 0 : Math.max(0, (now - begin) / DAY_MS);
	};
	const perDay = (kind: 'minute' | 'hour' | 'journal', most: number) =>
		held(kind) < 0.25 ? 0 : size.bytes[kind] / Math.min(held(kind), most);
	const packedHeld = size.packedDays.length === 0 ? 0 : held('blocks') - (now - (size.packing.packedUntil ?? now)) / DAY_MS;
	const growing: Record<Exclude<StoreKindName, 'rest'>, StoreKind> = {
		rows: {
			bytes: size.bytes.rows,
			bytesPerDay: (readingsPerDay ?? 0) * (bytesPerRow ?? 0),
			keepDays: retention.rowDays,
			heldDays: Math.min(held('rows'), retention.rowDays),
		},
		blocks: {
			bytes: size.bytes.blocks,
			bytesPerDay: (readingsPerDay ?? 0) * (bytesPerPacked ?? USUAL_BYTES),
			keepDays: Math.max(0, retention.rawDays - retention.rowDays),
			heldDays: Math.max(0, packedHeld),
			waitDays: Math.max(0, retention.rowDays - held('rows')),
		},
		minute: {
			bytes: size.bytes.minute,
			bytesPerDay: perDay('minute', retention.minuteDays),
			keepDays: retention.minuteDays,
			heldDays: held('minute'),
		},
		hour: {
			bytes: size.bytes.hour,
			bytesPerDay: perDay('hour', retention.hourDays),
			keepDays: retention.hourDays,
			heldDays: held('hour'),
		},
		journal: {
			bytes: size.bytes.journal,
			bytesPerDay: perDay('journal', retention.journalDays),
			keepDays: retention.journalDays,
			heldDays: held('journal'),
		},
	};
	const rowEdge = new Date(now - retention.rowDays * DAY_MS).toISOString().slice(0, 10);
	return {
		at: now,
		bytes: Object.values(size.bytes).reduce((sum, bytes) => sum + bytes, 0),
		freeBytes,
		kinds: [
			...Object.entries(growing).map(([kind, { bytes, keepDays, heldDays, bytesPerDay }]) => ({
				kind: kind as StoreKindName,
				bytes,
				keepDays,
				heldDays,
				bytesPerDay,
			})),
			{ kind: 'rest', bytes: size.bytes.rest, keepDays: null, heldDays: null, bytesPerDay: null },
		],
		forecast: forecastStore(Object.values(growing), size.bytes.rest, freeBytes),
		readingsPerDay,
		bytesPerRow,
		bytesPerPacked,
		oldestDay,
		newestDay: size.rowDays.at(-1)?.day ?? size.packedDays[0]?.day ?? null,
		daysDue: size.rowDays.filter(({ day }) => day < rowEdge).length,
		size,
		retention,
		rules,
	};
}

/** Readings of up to seven whole days before today. */
function recentDays(size: StoreSize, today: string): number[] {
	const all = new Map([...size.packedDays].map(({ day, readings }) => [day, readings]));
	for (const { day, readings } of size.rowDays) if (day < today) all.set(day, readings);
	// The first day is mostly a part of one, so it counts only where there is no other.
	const days = [...all].sort(([a], [b]) => b.localeCompare(a)).slice(0, 7);
	return (days.length > 1 && all.size === days.length ? days.slice(0, -1) : days).map(([, readings]) => readings);
}

function oldestOf(size: StoreSize): string | null {
	const firstRow = size.rowDays[0]?.day ?? null;
	if (size.since.blocks === null) return firstRow;
	const kept = size.packedDays
		.filter(({ day, readings }) => readings > 0 && Date.parse(day) >= (size.since.blocks ?? 0))
		.at(-1)?.day;
	return kept ?? new Date(size.since.blocks).toISOString().slice(0, 10);
}

async function listRules(pool: Pool): Promise<RuleLine[]> {
	const found = await pool.query<{ id: number; site: string | null; quantity: string | null; raw_days: number; tags: number }>(
		`SELECT r.id, s.name AS site, r.quantity, r.raw_days, (SELECT count(*) FROM tag_retention t WHERE t.retention_group = r.id) AS tags
		 FROM retention_rules r LEFT JOIN sites s ON s.id = r.site_id ORDER BY s.name NULLS LAST, r.quantity NULLS FIRST`,
	);
	return found.rows.map((row) => ({ id: row.id, site: row.site, quantity: row.quantity, rawDays: row.raw_days, tags: row.tags }));
}

/** Free bytes of the volume that PostgreSQL writes to; null where the database is another's. */
async function findFreeBytes(): Promise<number | null> {
	const { databaseFolder } = readConfig();
	if (!databaseFolder) return null;
	try {
		const volume = await statfs(databaseFolder);
		return volume.bavail * volume.bsize;
	} catch {
		return null;
	}
}
