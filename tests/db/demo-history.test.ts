import { afterAll, beforeAll, describe, expect, it } from 'vitest';
import { createPool, type Pool } from '#lib/server/db/pool.ts';
import { readConfig } from '#lib/server/config.ts';
import { createPlant } from '#simulators/scenario/plant.ts';
import { DEMO_SEED } from '#simulators/scenario/seed.ts';
import { layDemo } from '../../src/cli/lay-demo.ts';
import { cloneDatabase } from '../support/cluster.ts';

let database: Awaited<ReturnType<typeof cloneDatabase>>;
let pool: Pool;

beforeAll(async () => {
	database = await cloneDatabase();
	pool = createPool(database.url, { name: 'test', max: 4 });
	await layDemo(database.url, readConfig({}));
}, 120_000);
afterAll(async () => {
	await pool.end();
	await database.drop();
});

describe('the day that the demo plant has behind it', () => {
	it('holds what the sensor measured, in the unit of the tag', async () => {
		const found = await pool.query<{ at: Date; value: number }>(
			`SELECT r.at, r.value FROM readings r JOIN tags t ON t.id = r.tag_id WHERE t.name = 'HL-3.MDE.H.VEL' ORDER BY r.at`,
		);
		expect(found.rows.length).toBeGreaterThan(120); // every ten minutes of a day is 144, less what events take
		const plant = createPlant(DEMO_SEED);
		for (const { at, value } of found.rows) {
			// The gateway counts in/s derived peak: 25.4 mm an inch by definition (1959), divided by the square root of 2 for an rms.
			const measured = (plant.read('HL-3.MDE.H.VEL', at.getTime()).value ?? Number.NaN) * (25.4 / Math.SQRT2);
			expect(Math.abs(value - measured) / measured).toBeLessThan(1e-6); // a float32 has 24 bits
		}
	});

	it('ends before now and leaves no alarm that ended without an acknowledgement', async () => {
		const found = await pool.query<{ newest: Date; waiting: number; alarms: number }>(
			`SELECT (SELECT max(at) FROM readings) AS newest, (SELECT count(*)::int FROM alarms) AS alarms,
				(SELECT count(*)::int FROM alarms WHERE cleared_at IS NOT NULL AND acknowledged_at IS NULL) AS waiting`,
		);
		expect(found.rows[0]?.newest.getTime()).toBeLessThan(Date.now());
		expect(found.rows[0]?.waiting).toBe(0);
		expect(found.rows[0]?.alarms).toBeGreaterThan(0);
	});
});
