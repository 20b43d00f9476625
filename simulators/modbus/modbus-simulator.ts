// Edge: simulators. May touch: sockets. A Modbus server with its own frames, so that it can misbehave as devices do.
import { createServer, type Server, type Socket } from 'node:net';
import { crc16 } from './crc16.ts';
import type { RegisterImage } from './register-image.ts';

export interface ModbusSimulatorOptions {
	port: number;
	framing?: 'tcp' | 'rtu';
	image: RegisterImage;
	/** Most sockets at once; one more is closed as soon as it opens. */
	mostClients?: number;
}

/** How the device behaves just now; change it while it runs. */
export interface Behaviour {
	/** Exceptions by unit and register range; unit null is every unit. */
	exceptions: { unitId: number | null; from: number; to: number; code: number }[];
	/** Units that do not answer; null among them silences all. */
	silent: Set<number | null>;
	delayMs: number;
	/** Refuses with exception 6 what comes sooner after the last answer. */
	gapMs: number;
	/** Writes answers byte by byte with this pause. */
	bytePauseMs: number;
	/** Sent once before the next answer. */
	junk: Uint8Array | null;
	/** Holds back the answer to the request of this count (from 1) until so many have come. */
	hold: { request: number; until: number } | null;
	/** Answers in the name of this unit, whoever was asked. */
	answerAs: number | null;
	/** Most registers the device gives at once; more is exception 3. */
	mostRegisters: number;
}

export interface ModbusSimulator {
	readonly port: number;
	readonly behaviour: Behaviour;
	/** Requests taken since the start. */
	readonly requests: number;
	readonly log: { unitId: number; functionCode: number; start: number; count: number }[];
	/** Ends every socket with a reset. */
	reset(): void;
	stop(): Promise<void>;
}

const TABLES = { 1: 'coil', 2: 'discrete-input', 3: 'holding-register', 4: 'input-register' } as const;

/** A request's answer PDU [Modbus AP v1.1b3 §6, §7]: quantity is checked before address. */
function answerPdu(pdu: Buffer, unitId: number, image: RegisterImage, behaviour: Behaviour): Buffer {
	const functionCode = pdu[0] ?? 0;
	const exception = (code: number) => Buffer.from([functionCode | 0x80, code]);
	const table = TABLES[functionCode as keyof typeof TABLES] as (typeof TABLES)[keyof typeof TABLES] | undefined;
	if (!table) return exception(1);
	const start = pdu.readUInt16BE(1);
	const count = pdu.readUInt16BE(3);
	const isBits = functionCode <= 2;
	if (count < 1 || count > (isBits ? 2_000 : behaviour.mostRegisters)) return exception(3);
	if (start + count > 65_536) return exception(2);
	const refusal = behaviour.exceptions.find(
		(one) => (one.unitId === null || one.unitId === unitId) && one.from < start + count && start < one.to,
	);
	if (refusal) return exception(refusal.code);
	const values: number[] = [];
	for (let register = start; register < start + count; register += 1) {
		const value = image(unitId, table, register);
		if (value === null) return exception(2);
		values.push(value);
	}
	if (isBits) {
		const bytes = Buffer.alloc(2 + Math.ceil(count / 8));
		bytes[0] = functionCode;
		bytes[1] = bytes.length - 2;
		values.forEach((value, i) => {
			if (value) bytes[2 + (i >> 3)] = (bytes[2 + (i >> 3)] ?? 0) | (1 << (i & 7));
		});
		return bytes;
	}
	const bytes = Buffer.alloc(2 + count * 2);
	bytes[0] = functionCode;
	bytes[1] = count * 2;
	values.forEach((value, i) => bytes.writeUInt16BE(value, 2 + i * 2));
	return bytes;
}

/** Starts a device on 127.0.0.1. */
export async function startModbusSimulator(options: ModbusSimulatorOptions): Promise<ModbusSimulator> {
	const { framing = 'tcp', image, mostClients = 16 } = options;
	const behaviour: Behaviour = {
		exceptions: [],
		silent: new Set(),
		delayMs: 0,
		gapMs: 0,
		bytePauseMs: 0,
		junk: null,
		hold: null,
		answerAs: null,
		mostRegisters: 125,
	};
	const sockets = new Set<Socket>();
	const log: ModbusSimulator['log'] = [];
	let requests = 0;
	let lastAnswerAt = -Infinity;
	let held: (() => void) | null = null;

	const send = async (socket: Socket, frame: Buffer) => {
		if (behaviour.junk) {
			socket.write(behaviour.junk);
			behaviour.junk = null;
		}
		if (behaviour.bytePauseMs > 0) {
			for (const byte of frame) {
				if (socket.destroyed) return;
				socket.write(Uint8Array.of(byte));
				await new Promise((resolve) => setTimeout(resolve, behaviour.bytePauseMs));
			}
		} else if (!socket.destroyed) socket.write(frame);
		lastAnswerAt = performance.now();
	};
	const take = async (socket: Socket, unitId: number, pdu: Buffer, wrap: (answer: Buffer) => Buffer) => {
		requests += 1;
		const own = requests;
		if (pdu.length >= 5) {
			log.push({ unitId, functionCode: pdu[0] ?? 0, start: pdu.readUInt16BE(1), count: pdu.readUInt16BE(3) });
			if (log.length > 2_000) log.shift();
		}
		if (behaviour.silent.has(null) || behaviour.silent.has(unitId)) return;
		const isTooSoon = behaviour.gapMs > 0 && performance.now() - lastAnswerAt < behaviour.gapMs;
		const answer = isTooSoon ? Buffer.from([(pdu[0] ?? 0) | 0x80, 6]) : answerPdu(pdu, unitId, image, behaviour);
		if (behaviour.delayMs > 0) await new Promise((resolve) => setTimeout(resolve, behaviour.delayMs));
		const frame = wrap(answer);
		if (behaviour.hold?.request === own) {
			held = () => void send(socket, frame);
			return;
		}
		if (held && behaviour.hold && own >= behaviour.hold.until) {
			held();
			held = null;
		}
		await send(socket, frame);
	};

	const server: Server = createServer((socket) => {
		if (sockets.size >= mostClients) {
			socket.destroy();
			return;
		}
		sockets.add(socket);
		socket.setNoDelay(true);
		socket.on('error', () => undefined);
		socket.on('close', () => sockets.delete(socket));
		let buffer = Buffer.alloc(0);
		let working: Promise<void> = Promise.resolve();
		socket.on('data', (chunk: Buffer) => {
			buffer = Buffer.concat([buffer, chunk]);
			for (;;) {
				if (framing === 'tcp') {
					if (buffer.length < 8) return;
					const length = buffer.readUInt16BE(4);
					if (length < 2 || length > 254) {
						socket.destroy();
						return;
					}
					if (buffer.length < 6 + length) return;
					const header = Buffer.from(buffer.subarray(0, 4));
					const unitId = buffer[6] ?? 0;
					const pdu = Buffer.from(buffer.subarray(7, 6 + length));
					buffer = buffer.subarray(6 + length);
					const wrap = (answer: Buffer) => {
						const frame = Buffer.alloc(7 + answer.length);
						header.copy(frame, 0);
						frame.writeUInt16BE(answer.length + 1, 4);
						frame[6] = behaviour.answerAs ?? unitId;
						answer.copy(frame, 7);
						return frame;
					};
					working = working.then(() => take(socket, unitId, pdu, wrap));
				} else {
					if (buffer.length < 8) return;
					const frame = Buffer.from(buffer.subarray(0, 8));
					buffer = buffer.subarray(8);
					if (crc16(frame.subarray(0, 6)) !== frame.readUInt16LE(6)) continue;
					const unitId = frame[0] ?? 0;
					const wrap = (answer: Buffer) => {
						const whole = Buffer.concat([Buffer.from([behaviour.answerAs ?? unitId]), answer, Buffer.alloc(2)]);
						whole.writeUInt16LE(crc16(whole.subarray(0, whole.length - 2)), whole.length - 2);
						return whole;
					};
					working = working.then(() => take(socket, unitId, Buffer.from(frame.subarray(1, 6)), wrap));
				}
			}
		});
	});
	await new Promise<void>((resolve, reject) => {
		server.once('error', reject);
		server.listen(options.port, '127.0.0.1', () => resolve());
	});
	const address = server.address();
	return {
		port: address !== null && typeof address === 'object' ? address.port : options.port,
		behaviour,
		get requests() {
			return requests;
		},
		log,
		reset: () => {
			for (const socket of sockets) socket.resetAndDestroy();
		},
		stop: () =>
			new Promise((resolve) => {
				for (const socket of sockets) socket.destroy();
				server.close(() => resolve());
			}),
	};
}
