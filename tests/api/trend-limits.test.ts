import { afterAll, beforeAll, expect, it } from 'vitest';
import { createApp, type App } from '../support/app.ts';
import { layPlant, layTag, type Plant } from '../support/plant.ts';

let app: App;
let plant: Plant;
const at = '/api/v1/sites/saltmere';
const HOUR = 3_600_000;
const now = Math.floor(Date.now() / 1_000) * 1_000;
const iso = (ms: number) => new Date(ms).toISOString();

beforeAll(async () => {
	app = await createApp();
	plant = await layPlant(app.sql);
	await layTag(app.sql, plant.siteId, 'FAN.DE.V');
	// Two revisions: 4.5 from five hours ago, 4.0 in its place from two hours ago; the danger limit stands throughout.
	const put = async (alert: number, hoursAgo: number) => {
		const answer = await app.ask(`${at}/limits`, {
			method: 'PUT',
			key: plant.keys.all,
			json: {
				limits: [
					{ tag: 'FAN.DE.V', kind: 'high', level: 'alert', value: alert },
					{
						tag: 'FAN.DE.V',
						kind: 'high',
						level: 'danger',
						value: 7.1,
						note: 'zone C/D',
						cause: 'unbalance',
						consequence: 'bearing damage',
						response: 'change over',
						respond_within_s: 1800,
					},
				],
				note: `to ${alert}`,
			},
		});
		expect(answer.status).toBe(200);
		await app.sql.query(
			'UPDATE limit_revisions SET saved_at = $1 WHERE revision = (SELECT max(revision) FROM limit_revisions) AND site_id = $2',
			[iso(now - hoursAgo * HOUR), plant.siteId],
		);
	};
	await put(4.5, 5);
	await put(4, 2);
}, 60_000);
afterAll(() => app.close());

interface Answer {
	bucket_s: number;
	limits: { level: string; value: number; from: string; to: string | null; note: string | null }[];
	events: { at: string; kind: string; revision: number; note: string }[];
}
const trend = async (from: number, to: number) =>
	(await (
		await app.ask(`${at}/tags/FAN.DE.V/trend?from=${iso(from)}&to=${iso(to)}&points=100`, { key: plant.keys.read })
	).json()) as Answer;

it('a trend carries every limit with the time in which it was in force, and the changes of limits as events', async () => {
	const answer = await trend(now - 6 * HOUR, now);
	expect(answer.limits).toEqual([
		{ kind: 'high', level: 'alert', value: 4.5, from: iso(now - 5 * HOUR), to: iso(now - 2 * HOUR), origin: 'site', note: null },
		{ kind: 'high', level: 'danger', value: 7.1, from: iso(now - 5 * HOUR), to: null, origin: 'site', note: 'zone C/D' },
		{ kind: 'high', level: 'alert', value: 4, from: iso(now - 2 * HOUR), to: null, origin: 'site', note: null },
	]);
	expect(answer.events.filter((event) => event.kind === 'limits').map(({ at: when, note }) => [when, note])).toEqual([
		[iso(now - 5 * HOUR), 'to 4.5'],
		[iso(now - 2 * HOUR), 'to 4'],
	]);
	// Six hours in at most 99 spans: 218 s, so the next plain width is 5 minutes.
	expect(answer.bucket_s).toBe(300);
});

it('a range before a change shows only what was in force then', async () => {
	expect((await trend(now - 4 * HOUR, now - 3 * HOUR)).limits.map((limit) => limit.value)).toEqual([4.5, 7.1]);
	expect((await trend(now - 9 * HOUR, now - 8 * HOUR)).limits).toEqual([]);
});
