// Edge: cli. Two publishers at QoS 1. Arguments: port, number of topics. A line `N` on standard input has N messages published; answers `done`.
import { createInterface } from 'node:readline';
import { connectAsync } from 'mqtt';

const [port, topics] = process.argv.slice(2).map(Number);
const clients = await Promise.all([1, 2].map((n) => connectAsync(`mqtt://127.0.0.1:${port}`, { clientId: `publisher-${n}` })));
let serial = 0;
process.stdout.write('ready\n');
for await (const line of createInterface({ input: process.stdin })) {
	const many = Number(line);
	await Promise.all(
		clients.map(async (client, lane) => {
			const share = lane === 0 ? Math.ceil(many / 2) : Math.floor(many / 2);
			for (let sent = 0; sent < share;) {
				const some = Math.min(500, share - sent);
				const waiting: Promise<unknown>[] = [];
				for (let n = 0; n < some; n += 1) {
					serial += 1;
					waiting.push(client.publishAsync(`bench/${serial % (topics ?? 1)}`, String(serial), { qos: 1 }));
				}
				await Promise.all(waiting);
				sent += some;
			}
		}),
	);
	process.stdout.write('done\n');
}
