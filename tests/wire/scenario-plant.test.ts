// Edge: wire tests. May touch: sockets, child processes, simulators.
import { connectAsync } from 'mqtt';
import { afterEach, describe, expect, it } from 'vitest';
import { checkDraft } from '#lib/domain/tag-map/check-draft.ts';
import { unitRules } from '#lib/server/tag-map/unit-rules.ts';
import { startControlPort } from '#simulators/control/control-port.ts';
import { demoRows, demoSources } from '#simulators/demo/demo-map.ts';
import { startMqttSimulator } from '#simulators/mqtt/mqtt-simulator.ts';
import { startReceiverSimulator } from '#simulators/receiver/receiver-simulator.ts';
import { createPlant } from '#simulators/scenario/plant.ts';
import { startSmtpSimulator } from '#simulators/smtp/smtp-simulator.ts';

const ending: (() => Promise<unknown>)[] = [];
afterEach(async () => {
	for (const end of ending.splice(0).reverse()) await end();
});

it.each(['saltmere', 'corran'] as const)('the demo map of %s passes the check without an error', (site) => {
	const sources = demoSources({ opcua: 1, modbus: 2, rtu: 3, mqtt: 4 }).filter((one) => one.site === site);
	const check = checkDraft(
		demoRows(site),
		{
			sources: new Map(
				sources.map(({ source }) => [
					source.name.toLowerCase(),
					{ name: source.name, kind: source.kind, enabled: true, payload: source.kind === 'mqtt' ? 'json' : null } as const,
				]),
			),
			machineAreas: new Map(),
			settled: new Map(),
			convert: false,
			units: unitRules,
		},
		1,
	);
	expect(check.errors).toEqual([]);
});

describe('the simulators', () => {
	it('publish the plant, and do what the control port is told', async () => {
		const plant = createPlant(1, { scheduled: false });
		const mqtt = await startMqttSimulator({ port: 0, plant, tickMs: 50 });
		const smtp = await startSmtpSimulator({ port: 0 });
		const receiver = await startReceiverSimulator({ port: 0 });
		const actions = { 'mqtt-drop': () => mqtt.dropConnections() };
		const control = await startControlPort({ port: 0, plant, mqtt, smtp, receiver, actions });
		ending.push(
			() => mqtt.stop(),
			() => smtp.stop(),
			() => receiver.stop(),
			() => control.stop(),
		);
		const client = await connectAsync(`mqtt://127.0.0.1:${mqtt.port}`, { reconnectPeriod: 0 });
		ending.push(() => client.endAsync(true));
		const heard = new Promise<string>((resolve) =>
			client.on('message', (topic, payload) => resolve(`${topic} ${String(payload)}`)),
		);
		await client.subscribeAsync('saltmere/#');
		expect(await heard).toMatch(/^saltmere\/[a-z-]+\/[a-z0-9-]+\/[a-z]+ \{"value":[\d.]+,"time":"[^"]+Z","good":true\}$/);

		const ask = async (path: string, method = 'GET', body?: unknown): Promise<unknown> => {
			const init = body === undefined ? { method } : { method, body: JSON.stringify(body) };
			return (await fetch(`http://127.0.0.1:${control.port}${path}`, init)).json();
		};
		expect(await ask('/events/hl3-unbalance', 'POST', { lasts_s: 60 })).toMatchObject({ name: 'hl3-unbalance' });
		expect(plant.event('hl3-unbalance', Date.now())?.provoked).toBe(true);
		await ask('/receiver/fail', 'POST', { count: 1 });
		const post = () => fetch(`http://127.0.0.1:${receiver.port}/text`, { method: 'POST', body: 'HL-3' });
		expect([(await post()).status, (await post()).status]).toEqual([503, 202]);
		expect(await ask('/received')).toMatchObject({ items: [{ status: 503 }, { body: 'HL-3', path: '/text', status: 202 }] });
		expect(await ask('/mails')).toEqual({ items: [] });
		const closed = new Promise<void>((resolve) => client.once('close', () => resolve()));
		await ask('/events/mqtt-drop', 'POST');
		await closed;
	});
});
