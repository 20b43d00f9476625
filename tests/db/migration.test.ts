import { cpSync, mkdtempSync, readFileSync, rmSync, writeFileSync } from 'node:fs';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import pg from 'pg';
import { afterAll, beforeAll, describe, expect, it } from 'vitest';
import { migrateDatabase } from '#lib/server/db/migrate.ts';
import { createPool, type Pool } from '#lib/server/db/pool.ts';
import { cloneDatabase } from '../support/cluster.ts';

describe('a freshly migrated database', () => {
	let database: Awaited<ReturnType<typeof cloneDatabase>>;
	let pool: Pool;
	beforeAll(async () => {
		database = await cloneDatabase();
		pool = createPool(database.url, { name: 'test', max: 2 });
	});
	afterAll(async () => {
		await pool.end();
		await database.drop();
	});

	it('runs the application as millrace_app', async () => {
		expect((await pool.query('SELECT current_user AS who')).rows[0].who).toBe('millrace_app');
	});

	it('lets the application add and read audit entries, and never change or remove one', async () => {
		await pool.query(
			"INSERT INTO audit_entries (actor_kind, actor_name, action, subject_kind) VALUES ('system', 'test', 'site.created', 'site')",
		);
		expect((await pool.query('SELECT count(*)::int AS n FROM audit_entries')).rows[0].n).toBe(1);
		await expect(pool.query("UPDATE audit_entries SET actor_name = 'x'")).rejects.toThrow(/permission denied/);
		await expect(pool.query('DELETE FROM audit_entries')).rejects.toThrow(/permission denied/);
		const owner = new pg.Client({ connectionString: database.url });
		await owner.connect();
		await expect(owner.query('DELETE FROM audit_entries')).rejects.toThrow(/never changed or removed/);
		await owner.end();
	});

	it('makes a day partition once, and takes a reading whose value is missing as its own identity', async () => {
		const make = () => pool.query("SELECT ensure_partition('readings', '2026-12-01', '2026-12-02') AS made");
		expect((await make()).rows[0].made).toBe(true);
		expect((await make()).rows[0].made).toBe(false);
		const insert = () =>
			pool.query(
				"INSERT INTO readings (tag_id, at, value, quality, received_at, is_hub_time, revision) VALUES (1, '2026-12-01T10:00:00Z', NULL, -2144600064, now(), false, 1) ON CONFLICT DO NOTHING",
			);
		expect((await insert()).rowCount).toBe(1);
		expect((await insert()).rowCount).toBe(0);
	});

	it('shows readings through one view, with the UTC hour of each, to the application too', async () => {
		await pool.query("SELECT ensure_partition('readings', '2026-12-02', '2026-12-03')");
		await pool.query(
			"INSERT INTO readings (tag_id, at, value, quality, received_at, is_hub_time, revision) VALUES (2, '2026-12-02T10:59:59.999Z', 1, 0, now(), false, 1)",
		);
		const found = await pool.query('SELECT at, value, hour FROM reading_history WHERE tag_id = 2');
		expect(found.rows).toEqual([
			{ at: new Date('2026-12-02T10:59:59.999Z'), value: 1, hour: new Date('2026-12-02T10:00:00.000Z') },
		]);
	});
});

describe('a store of an earlier version', () => {
	it('keeps its readings and exchanges, and takes new ones', async () => {
		const folder = mkdtempSync(join(tmpdir(), 'millrace-migrations-'));
		cpSync('drizzle', folder, { recursive: true });
		const file = join(folder, 'meta/_journal.json');
		const journal = JSON.parse(readFileSync(file, 'utf8')) as { entries: { tag: string }[] };
		// The last version without packed days.
		const entries = journal.entries.filter(({ tag }) => tag < '0005');
		writeFileSync(file, JSON.stringify({ ...journal, entries }));
		const server = process.env.TEST_CLUSTER_URL ?? '';
		const name = `t_earlier_${process.pid}`;
		const admin = new pg.Client({ connectionString: `${server}/postgres` });
		await admin.connect();
		await admin.query(`CREATE DATABASE ${name}`);
		const url = `${server}/${name}`;
		try {
			await migrateDatabase(url, folder);
			const owner = new pg.Client({ connectionString: url, options: '-c timezone=UTC' });
			await owner.connect();
			await owner.query("SELECT ensure_partition('readings', '2026-11-20', '2026-11-21')");
			await owner.query(
				"INSERT INTO readings (tag_id, at, value, quality, received_at, is_hub_time, revision) VALUES (1, '2026-11-20T10:00:00Z', 5, 0, now(), false, 1)",
			);
			await owner.query(
				`WITH site AS (INSERT INTO sites (slug, name) VALUES ('a', 'A') RETURNING id),
					source AS (INSERT INTO sources (site_id, name, kind, settings) SELECT id, 'S', 'mqtt', '{}' FROM site RETURNING id)
				 INSERT INTO source_exchanges (source_id, at, direction, bytes, meaning, failed)
				 SELECT id, at::timestamptz, 'in', '01', 'x', true FROM source, unnest(ARRAY['2026-11-20T10:00:00Z', '2026-11-21T23:59:59Z']) AS at`,
			);
			await migrateDatabase(url, 'drizzle');
			expect((await owner.query('SELECT at, value FROM reading_history')).rows).toEqual([
				{ at: new Date('2026-11-20T10:00:00Z'), value: 5 },
			]);
			expect((await owner.query('SELECT id, at, meaning FROM source_exchanges ORDER BY at')).rows).toMatchObject([
				{ at: new Date('2026-11-20T10:00:00Z'), meaning: 'x' },
				{ at: new Date('2026-11-21T23:59:59Z') },
			]);
			// Past its days an exchange goes with its table.
			expect((await owner.query("SELECT drop_partitions('source_exchanges', '2026-11-21') AS n")).rows[0].n).toBe(1);
			expect((await owner.query('SELECT count(*)::int AS n FROM source_exchanges')).rows[0].n).toBe(1);
			await owner.end();
		} finally {
			await admin.query(`DROP DATABASE ${name} WITH (FORCE)`);
			await admin.end();
			rmSync(folder, { recursive: true });
		}
	});
});
