// Edge: cli. May touch: MQTT. Publishes numbered messages and knows which were acknowledged. Arguments: port, topics, messages a second.
import { createInterface } from 'node:readline';
import { connectAsync } from 'mqtt';

const [port = 0, topics = 1, rate = 1] = process.argv.slice(2).map(Number);
const TICK_MS = 100;
const client = await connectAsync(`mqtt://127.0.0.1:${port}`, { clientId: 'soak-publisher', clean: false, reconnectPeriod: 200 });
client.on('error', () => undefined);
const sent = new Array<number>(topics).fill(0);
const acknowledged = new Array<number>(topics).fill(0);
let underway = 0;
let due = 0;
let topic = 0;
let isStopping = false;
const timer = setInterval(() => {
	due += (rate * TICK_MS) / 1_000;
	// A broker that is away is waited for: messages that nobody took were not sent.
	for (; due >= 1 && underway < 5_000; due -= 1) {
		const lane = topic;
		topic = (topic + 1) % topics;
		const n = (sent[lane] = (sent[lane] ?? 0) + 1);
		underway += 1;
		client
			.publishAsync(`soak/${lane}`, JSON.stringify({ t: Date.now(), n }), { qos: 1 })
			.then(() => (acknowledged[lane] = (acknowledged[lane] ?? 0) + 1))
			.catch(() => undefined)
			.finally(() => (underway -= 1));
	}
	due = Math.min(due, rate);
}, TICK_MS);
process.stdout.write('ready\n');
for await (const line of createInterface({ input: process.stdin })) {
	if (line === 'stop') {
		isStopping = true;
		clearInterval(timer);
		for (let waits = 0; underway > 0 && waits < 600; waits += 1) await new Promise((resolve) => setTimeout(resolve, 50));
	}
	process.stdout.write(`${JSON.stringify({ sent, acknowledged, underway })}\n`);
	if (isStopping) break;
}
await client.endAsync();
process.exit(0);
