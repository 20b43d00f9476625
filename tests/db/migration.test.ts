import pg from 'pg';
import { afterAll, beforeAll, describe, expect, it } from 'vitest';
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
