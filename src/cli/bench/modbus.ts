// Edge: cli. May touch: the Modbus source, a peer. Registers a second through the adapter against a bare loop of the fewest reads.
import ModbusRTU from 'modbus-serial';
import { modbusSettings } from '#lib/domain/source-settings.ts';
import type { ModbusAddress, WantedAddress } from '#lib/domain/tag-map/address.ts';
import { createModbusSource } from '#lib/pipeline/sources/modbus/modbus-source.ts';
import { findFreePort } from '../throwaway-product.ts';
import { benchLine, median, type BenchLine } from './line.ts';
import { cpuSeconds, startPeer } from './peer.ts';

const ROUNDS = 5;
const ROUND_MS = 2_000;
/** The next round is due as soon as one ends. */
const WITHOUT_PAUSE_MS = 0.01;
const UNITS = 10;
/** A unit's 200 registers: 60 float32, then 80 int16. */
const FLOATS = 60;
const WORDS = 80;
const REGISTERS = FLOATS * 2 + WORDS;
/** The fewest reads that cover them [Modbus AP v1.1b3 §6.3: at most 125 a read, none through the middle of a value]. */
const READS = [
	[0, 124],
	[124, REGISTERS - 124],
] as const;

function addresses(): WantedAddress[] {
	const wanted: WantedAddress[] = [];
	const common = { kind: 'modbus', table: 'holding-register', byteOrder: 'big', wordOrder: 'big', bit: null } as const;
	for (let unitId = 1; unitId <= UNITS; unitId += 1) {
		const add = (register: number, dataType: ModbusAddress['dataType']) =>
			wanted.push({ key: wanted.length + 1, intervalMs: WITHOUT_PAUSE_MS, address: { ...common, unitId, register, dataType } });
		for (let n = 0; n < FLOATS; n += 1) add(n * 2, 'float32');
		for (let n = 0; n < WORDS; n += 1) add(FLOATS * 2 + n, 'int16');
	}
	return wanted;
}

/** Ours and the reference in turn against the same device. */
export async function benchModbus(): Promise<BenchLine> {
	const port = await findFreePort();
	const peer = await startPeer('modbus-peer.ts', [String(port)]);
	const ours: number[] = [];
	const reference: number[] = [];
	const cpu: { ours: number[]; reference: number[] } = { ours: [], reference: [] };
	try {
		for (let round = 0; round < ROUNDS; round += 1) {
			for (const [list, cost, run] of [
				[ours, cpu.ours, adapter],
				[reference, cpu.reference, bareLoop],
			] as const) {
				const used = cpuSeconds();
				const started = performance.now();
				const registers = await run(port);
				list.push((registers / (performance.now() - started)) * 1_000);
				cost.push((cpuSeconds() - used) / registers);
			}
		}
	} finally {
		await peer.stop();
	}
	return {
		...benchLine(
			'modbus',
			ours,
			reference,
			'registers/s',
			`${UNITS * REGISTERS} registers (float32 and int16) on ${UNITS} units against ${UNITS * READS.length} reads a round in a bare loop`,
		),
		cpu_ratio: Math.round((median(cpu.ours) / median(cpu.reference)) * 1_000) / 1_000,
	};
}

export async function adapter(port: number): Promise<number> {
	const stop = new AbortController();
	let registers = 0;
	const source = createModbusSource(modbusSettings.parse({ host: '127.0.0.1', port }), {
		observer: { event: () => undefined, exchange: () => undefined, request: () => undefined, clockSkew: () => undefined },
		pkiFolder: '',
		installationId: 'bench',
		now: Date.now,
	});
	const link = await source.open((batch) => {
		for (const sample of batch) if (sample.raw?.kind === 'registers') registers += sample.raw.bytes.length / 2;
		return Promise.resolve('stored');
	}, stop.signal);
	await link.setAddresses(addresses());
	await new Promise((resolve) => setTimeout(resolve, ROUND_MS));
	stop.abort();
	await link.closed;
	return registers;
}

export async function bareLoop(port: number): Promise<number> {
	const client = new ModbusRTU();
	await client.connectTCP('127.0.0.1', { port });
	client.setTimeout(2_000);
	let registers = 0;
	const until = performance.now() + ROUND_MS;
	while (performance.now() < until) {
		for (let unit = 1; unit <= UNITS; unit += 1) {
			client.setID(unit);
			for (const [first, count] of READS) registers += (await client.readHoldingRegisters(first, count)).data.length;
		}
	}
	await new Promise<void>((resolve) => client.close(() => resolve()));
	return registers;
}
