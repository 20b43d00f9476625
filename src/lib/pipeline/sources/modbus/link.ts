// Edge: sources. May touch: modbus-serial, sockets. One connection to one host and port, one request in flight.
import ModbusRTU from 'modbus-serial';
import type { ModbusSettings } from '#lib/domain/source-settings.ts';
import { isBitTable, type Table } from './read-plan.ts';

/** What came of one request. A timeout or a broken frame has dropped the socket: what arrives late must never answer the next request. */
export type ReadOutcome =
	| { kind: 'answer'; bytes: Uint8Array; ms: number }
	| { kind: 'exception'; code: number; ms: number }
	| { kind: 'timeout'; ms: number }
	| { kind: 'broken'; detail: string; ms: number };

type ClientError = Error & { modbusCode?: number; code?: string; errno?: string };

/** Host and port, or the serial path, as people say it. */
export function placeOf(settings: ModbusSettings): string {
	return settings.transport === 'rtu'
		? (settings.path ?? 'no serial port')
		: `${settings.host ?? 'no host'}, port ${settings.port ?? 502}`;
}

/** Rejects with a plain error whose `code` tells why. */
export class ModbusLink {
	readonly #settings: ModbusSettings;
	#client: ModbusRTU | null = null;
	#lastEnd = -Infinity;
	/** Unit id of the newest frame: the library checks it in answers, but not in exceptions. */
	#answeredBy: number | null = null;

	constructor(settings: ModbusSettings) {
		this.#settings = settings;
	}

	get isOpen(): boolean {
		return this.#client?.isOpen ?? false;
	}

	/** Connects with a client made anew: the library does not reconnect one of its own. */
	async connect(): Promise<void> {
		this.drop();
		const { transport, host, port, path, baud_rate: baudRate, timeout_ms: timeoutMs } = this.#settings;
		const client = new ModbusRTU();
		client.on('error', () => undefined);
		let limit: NodeJS.Timeout | undefined;
		const late = new Promise<never>((_, reject) => {
			limit = setTimeout(
				() => reject(Object.assign(new Error('no answer to the connection'), { code: 'ETIMEDOUT' })),
				Math.max(timeoutMs, 3_000),
			);
		});
		const where = { port: port ?? 502 };
		const opening =
			transport === 'rtu'
				? client.connectRTUBuffered(path ?? '', { baudRate: baudRate ?? 19_200 })
				: transport === 'rtu-over-tcp'
					? client.connectTelnet(host ?? '', where)
					: client.connectTCP(host ?? '', where);
		try {
			await Promise.race([opening, late]);
		} catch (error) {
			opening.catch(() => undefined);
			destroy(client);
			throw named(error as ClientError);
		} finally {
			clearTimeout(limit);
		}
		portOf(client).on('data', (frame: Buffer) => {
			this.#answeredBy = frame[0] ?? null;
		});
		client.setTimeout(timeoutMs);
		this.#client = client;
		// A device that wants a pause wants it after the connection too.
		this.#lastEnd = performance.now();
	}

	/** One request. Id and request go out in the same tick, since the id is the connection's and not the request's. */
	async read(unitId: number, table: Table, start: number, count: number): Promise<ReadOutcome> {
		const client = this.#client;
		if (!client) return { kind: 'broken', detail: 'not connected', ms: 0 };
		const { gap_ms: gapMs } = this.#settings;
		if (gapMs > 0) {
			const wait = this.#lastEnd + gapMs - performance.now();
			if (wait > 0) await new Promise((resolve) => setTimeout(resolve, wait));
		}
		const begun = performance.now();
		try {
			this.#answeredBy = null;
			client.setID(unitId);
			const { buffer } = await request(client, table, start, count);
			const expected = isBitTable(table) ? Math.ceil(count / 8) : count * 2;
			if (buffer.length !== expected) {
				this.drop();
				return { kind: 'broken', detail: `${buffer.length} bytes answered, ${expected} expected`, ms: performance.now() - begun };
			}
			return { kind: 'answer', bytes: buffer, ms: performance.now() - begun };
		} catch (thrown) {
			const error = named(thrown as ClientError);
			const ms = performance.now() - begun;
			if (typeof error.modbusCode === 'number' && this.#answeredBy !== unitId) {
				this.drop();
				return { kind: 'broken', detail: `unit ${this.#answeredBy} answered for unit ${unitId}`, ms };
			}
			if (typeof error.modbusCode === 'number') return { kind: 'exception', code: error.modbusCode, ms };
			this.drop();
			return error.code === 'ETIMEDOUT' ? { kind: 'timeout', ms } : { kind: 'broken', detail: error.message, ms };
		} finally {
			this.#lastEnd = performance.now();
		}
	}

	/** Ends the socket without waiting for anybody. */
	drop(): void {
		const client = this.#client;
		this.#client = null;
		if (client) destroy(client);
	}
}

/** The library's own port, which emits each frame as unit, function, data and check sum. */
function portOf(client: ModbusRTU): NodeJS.EventEmitter {
	return (client as unknown as { _port: NodeJS.EventEmitter })._port;
}

function request(client: ModbusRTU, table: Table, start: number, count: number): Promise<{ buffer: Buffer }> {
	switch (table) {
		case 'coil':
			return client.readCoils(start, count);
		case 'discrete-input':
			return client.readDiscreteInputs(start, count);
		case 'holding-register':
			return client.readHoldingRegisters(start, count);
		case 'input-register':
			return client.readInputRegisters(start, count);
	}
}

function destroy(client: ModbusRTU): void {
	try {
		client.destroy(() => undefined);
	} catch {
		// A port that never opened has nothing to end.
	}
}

/** The library tells some failures by name or `errno` only. */
function named(error: ClientError): ClientError {
	if (error.name === 'TransactionTimedOutError' || error.errno === 'ETIMEDOUT' || /timed out/i.test(error.message))
		return Object.assign(error, { code: 'ETIMEDOUT' });
	return error.code === undefined && error.errno !== undefined ? Object.assign(error, { code: error.errno }) : error;
}
