// Edge: cli. A Modbus TCP device that does as little as one can: every register holds its own address. Arguments: port.
import { createServer } from 'node:net';

const HEADER = 7;
const server = createServer((socket) => {
	let rest = Buffer.alloc(0);
	socket.setNoDelay(true);
	socket.on('error', () => socket.destroy());
	socket.on('data', (chunk) => {
		rest = rest.length === 0 ? chunk : Buffer.concat([rest, chunk]);
		// Transaction, protocol, length, unit; then function, first register, count [Modbus AP v1.1b3 §6.3].
		while (rest.length >= HEADER + 5) {
			const first = rest.readUInt16BE(8);
			const count = rest.readUInt16BE(10);
			const answer = Buffer.alloc(HEADER + 2 + count * 2);
			rest.copy(answer, 0, 0, 4);
			answer.writeUInt16BE(3 + count * 2, 4);
			answer[6] = rest[6] ?? 0;
			answer[7] = rest[7] ?? 0;
			answer[8] = count * 2;
			for (let i = 0; i < count; i += 1) answer.writeUInt16BE((first + i) & 0xffff, 9 + i * 2);
			socket.write(answer);
			rest = rest.subarray(HEADER + 5);
		}
	});
});
server.listen(Number(process.argv[2]), '127.0.0.1', () => process.stdout.write('ready\n'));
process.on('SIGTERM', () => process.exit(0));
