import { execFile } from 'node:child_process';
import { existsSync } from 'node:fs';
import { createConnection } from 'node:net';
import { afterEach, describe, expect, it, vi } from 'vitest';
import { modbusSettings, type ModbusSettings } from '#lib/domain/source-settings.ts';
import type { ModbusAddress } from '#lib/domain/tag-map/address.ts';
import { bytesToHex, decodeRegisters } from '#lib/pipeline/decode/registers.ts';
import { createModbusSource } from '#lib/pipeline/sources/modbus/modbus-source.ts';
import type { Sample, SourceLink, WantedAddress } from '#lib/pipeline/sources/source.ts';
import { crc16 } from '../../simulators/modbus/crc16.ts';
import { startModbusSimulator, type ModbusSimulator } from '../../simulators/modbus/modbus-simulator.ts';
import type { RegisterImage } from '../../simulators/modbus/register-image.ts';

const running: (() => Promise<unknown>)[] = [];
afterEach(async () => {
	for (const stop of running.splice(0).reverse()) await stop();
});

/** Unit u, register r holds u × 1000 + r, up to register 300. */
const countingImage: RegisterImage = (unit, _, register) => (register < 301 ? unit * 1_000 + register : null);

async function device(extra: Partial<Parameters<typeof startModbusSimulator>[0]> = {}): Promise<ModbusSimulator> {
	const made = await startModbusSimulator({ port: 0, image: countingImage, ...extra });
	running.push(() => made.stop());
	return made;
}

const at = (register: number, extra: Partial<ModbusAddress> = {}): ModbusAddress => ({
	kind: 'modbus',
	unitId: 1,
	table: 'input-register',
	register,
	dataType: 'uint16',
	byteOrder: 'big',
	wordOrder: 'big',
	bit: null,
	...extra,
});
const wanted = (addresses: ModbusAddress[], intervalMs = 50): WantedAddress[] =>
	addresses.map((address, i) => ({ key: i + 1, address, intervalMs }));

/** Opens a source; answers what it brings. */
async function open(port: number, addresses: WantedAddress[], settings: Partial<ModbusSettings> = {}) {
	const samples: Sample[] = [];
	const events: string[] = [];
	const stop = new AbortController();
	const source = createModbusSource(modbusSettings.parse({ host: '127.0.0.1', port, timeout_ms: 150, ...settings }), {
		observer: {
			event: (_, code) => events.push(code),
			exchange: () => undefined,
			request: () => undefined,
			clockSkew: () => undefined,
		},
		pkiFolder: '',
		installationId: 'test',
		now: Date.now,
	});
	const link = (await source.open(async (batch) => {
		samples.push(...batch);
		return 'stored';
	}, stop.signal)) as SourceLink;
	await link.setAddresses(addresses);
	running.push(async () => {
		stop.abort();
		await link.closed.catch(() => undefined);
	});
	return { samples, events, link, source };
}
const valueOf = (sample: Sample, dataType: ModbusAddress['dataType'] = 'uint16') => {
	if (sample.raw?.kind !== 'registers') return sample.fault?.code ?? null;
	const decoded = decodeRegisters(sample.raw.bytes, at(0, { dataType }));
	return decoded.ok ? decoded.value : decoded.reason;
};
async function until(what: () => boolean, ms = 5_000): Promise<void> {
	const deadline = performance.now() + ms;
	while (!what()) {
		if (performance.now() > deadline) throw new Error('it did not happen in time');
		await new Promise((resolve) => setTimeout(resolve, 10));
	}
}

describe('frames on the wire', () => {
	/** Sends bytes and reads the answer. */
	const exchange = (port: number, hex: string, length: number) =>
		new Promise<string>((resolve) => {
			const socket = createConnection(port, '127.0.0.1', () => socket.write(Buffer.from(hex.replaceAll(' ', ''), 'hex')));
			let got = Buffer.alloc(0);
			socket.on('data', (chunk) => {
				got = Buffer.concat([got, chunk]);
				if (got.length >= length) {
					socket.destroy();
					resolve(bytesToHex(got));
				}
			});
		});

	// Source: Modbus Application Protocol v1.1b3 §6.1 to §6.4, §7, as two open test suites print them.
	const image: RegisterImage = (_, table, address) => {
		if (table === 'coil')
			return [0xcd, 0x6b, 0x05][(address - 19) >> 3] === undefined
				? null
				: (([0xcd, 0x6b, 0x05][(address - 19) >> 3] ?? 0) >> ((address - 19) & 7)) & 1;
		if (table === 'holding-register') return ({ 107: 555, 108: 0, 109: 100 } as Record<number, number>)[address] ?? null;
		return address === 8 ? 10 : null;
	};
	it.each([
		['function 03', '1234 0000 0006 07 03 006B 0003', '12 34 00 00 00 09 07 03 06 02 2B 00 00 00 64'],
		['function 04', '0001 0000 0006 01 04 0008 0001', '00 01 00 00 00 05 01 04 02 00 0A'],
		['function 01', '0001 0000 0006 01 01 0013 0013', '00 01 00 00 00 06 01 01 03 CD 6B 05'],
		['an address that is not there', '0001 0000 0006 01 03 04A1 0001', '00 01 00 00 00 03 01 83 02'],
		['126 registers', '0001 0000 0006 01 03 006B 007E', '00 01 00 00 00 03 01 83 03'],
		['none at all', '0001 0000 0006 01 03 006B 0000', '00 01 00 00 00 03 01 83 03'],
		['past the end of the table', '0001 0000 0006 01 03 FFFF 0002', '00 01 00 00 00 03 01 83 02'],
	])('%s', async (_, request, answer) => {
		const made = await device({ image });
		expect(await exchange(made.port, request, answer.split(' ').length)).toBe(answer);
	});

	it('CRC-16 of "123456789" is 4B37, and the frame 01 03 006B 0003 ends 74 17 [catalogue of parametrised CRC algorithms]', () => {
		expect(crc16(new TextEncoder().encode('123456789'))).toBe(0x4b37);
		expect(crc16(Uint8Array.of(1, 3, 0, 0x6b, 0, 3))).toBe(0x1774);
	});
});

describe('reading', () => {
	it('brings each address its own bytes with as few requests as the protocol allows', async () => {
		const made = await device();
		const { samples } = await open(made.port, wanted([at(0), at(7), at(120), at(130), at(10, { unitId: 2 })]));
		await until(() => samples.length >= 10);
		for (const sample of samples) expect(valueOf(sample)).toBe([0, 1_000, 1_007, 1_120, 1_130, 2_010][sample.key]);
		const round = made.log.slice(0, 3).map((one) => `${one.unitId} ${one.start}+${one.count}`);
		expect(round.sort()).toEqual(['1 0+121', '1 130+1', '2 10+1']);
	});

	it('a bad register spoils none of its neighbours, and is remembered', async () => {
		const made = await device();
		made.behaviour.exceptions = [{ unitId: 1, from: 5, to: 6, code: 2 }];
		const { samples, events } = await open(made.port, wanted([at(3), at(4), at(5), at(6), at(7)]));
		await until(() => samples.filter((sample) => sample.key === 5).length > 3);
		const bad = samples.filter((sample) => sample.fault);
		expect(new Set(bad.map((sample) => sample.key))).toEqual(new Set([3]));
		expect(bad.every((sample) => sample.fault?.code === 'exception')).toBe(true);
		expect(samples.filter((sample) => sample.key !== 3).every((sample) => valueOf(sample) === 1_000 + sample.key + 2)).toBe(true);
		expect(events.filter((code) => code === 'exception-2')).toHaveLength(1);
		const later = made.log.slice(-4);
		expect(later.every((one) => one.start > 5 || one.start + one.count <= 5)).toBe(true);
	});

	it('passes a sentinel and a negative number on as they are, without scale or sign lost', async () => {
		const made = await device({ image: (_, __, register) => [0x8000, 0xff83, 0xffff][register] ?? null });
		const { samples } = await open(made.port, wanted([at(0), at(1), at(2)]));
		await until(() => samples.length >= 3);
		expect(samples.slice(0, 3).map((sample) => valueOf(sample, 'int16'))).toEqual([-32768, -125, -1]);
	});

	it('takes only the difference of new addresses: what goes on loses no round', async () => {
		const made = await device();
		const { samples, link } = await open(made.port, wanted([at(0)], 40));
		await until(() => samples.length >= 5);
		await link.setAddresses([...wanted([at(0)], 40), { key: 9, address: at(9), intervalMs: 40 }]);
		await until(() => samples.filter((sample) => sample.key === 9).length >= 5);
		const times = samples.filter((sample) => sample.key === 1).map((sample) => sample.receivedAt);
		expect(Math.max(...times.slice(1).map((time, i) => time - (times[i] ?? time)))).toBeLessThan(120);
	});
});

describe('a device that misbehaves', () => {
	it('a late answer is never taken for another request’s value', async () => {
		// The library counts transaction ids modulo 256: an answer held back from request 2 bears the id of request 258.
		const made = await device();
		made.behaviour.hold = { request: 2, until: 258 };
		// One unit and three blocks, so that request 258 asks for another register than request 2: nothing but the id could tell them apart.
		const registers = [0, 150, 290];
		const { samples } = await open(
			made.port,
			registers.map((register, i) => ({ key: i + 1, address: at(register), intervalMs: 20 })),
		);
		await until(() => made.requests > 300, 20_000);
		const wrong = samples.filter((sample) => !sample.fault && valueOf(sample) !== 1_000 + (registers[sample.key - 1] ?? 0));
		expect(wrong).toEqual([]);
		expect(samples.some((sample) => sample.fault?.code === 'no-answer')).toBe(true);
	}, 30_000);

	it('an exception in another unit’s name is not taken for this one’s', async () => {
		const made = await device();
		made.behaviour.exceptions = [{ unitId: null, from: 0, to: 300, code: 2 }];
		made.behaviour.answerAs = 9;
		const { samples } = await open(made.port, wanted([at(0)]));
		await until(() => samples.length >= 2);
		expect(samples.map((sample) => sample.fault?.code)).not.toContain('exception');
	});

	it('a device that gives fewer registers at once than the protocol allows is asked for fewer from then on', async () => {
		const made = await device();
		made.behaviour.mostRegisters = 40;
		const { samples } = await open(
			made.port,
			wanted(
				Array.from({ length: 100 }, (_, i) => at(i)),
				50,
			),
		);
		await until(() => samples.length >= 1_000);
		expect(samples.every((sample) => sample.fault === null && valueOf(sample) === 999 + sample.key)).toBe(true);
		expect(made.log.slice(-20).every((one) => one.count <= 40)).toBe(true);
	});

	it('a refused register that nobody wants is read over no more', async () => {
		const made = await device();
		made.behaviour.exceptions = [{ unitId: 1, from: 5, to: 6, code: 2 }];
		const { samples } = await open(made.port, wanted([at(3), at(7)]));
		await until(() => samples.length >= 20);
		expect(samples.every((sample) => sample.fault === null)).toBe(true);
		expect(made.log.filter((one) => one.start <= 5 && 5 < one.start + one.count)).toHaveLength(1);
	});

	it('a part that timed out is no sign of a gap: once all is well again, one read takes it all', async () => {
		const made = await device();
		made.behaviour.exceptions = [{ unitId: 1, from: 5, to: 6, code: 2 }];
		// Request 1 is refused as a whole, request 2 is its lower half: it gets no answer, the upper half does.
		made.behaviour.hold = { request: 2, until: 1_000_000 };
		const { samples } = await open(made.port, wanted([at(3), at(7)], 400));
		await until(() => samples.length >= 2);
		made.behaviour.exceptions = [];
		const before = made.requests;
		await until(() => made.requests >= before + 4);
		expect(samples[0]).toMatchObject({ key: 1, fault: { code: 'no-answer' } });
		expect(made.log.slice(-2).map((one) => `${one.start}+${one.count}`)).toEqual(['3+5', '3+5']);
	});

	it('a refused register that is asked again and gets no answer says so, like any other read', async () => {
		const real = performance.now.bind(performance);
		let aheadMs = 0;
		const clock = vi.spyOn(performance, 'now').mockImplementation(() => real() + aheadMs);
		running.push(async () => clock.mockRestore());
		const made = await device();
		made.behaviour.exceptions = [{ unitId: 2, from: 5, to: 6, code: 2 }];
		const { samples, events, link } = await open(
			made.port,
			[1, 2].map((unitId) => ({ key: unitId, address: at(5, { unitId }), intervalMs: 50 })),
		);
		const ofTwo = () => samples.filter((sample) => sample.key === 2).map((sample) => sample.fault?.code ?? valueOf(sample));
		await until(() => ofTwo().length === 1);
		made.behaviour.silent.add(2);
		for (const times of [2, 3]) {
			aheadMs += 61_000;
			await until(() => ofTwo().length === times);
		}
		expect(ofTwo()).toEqual(['exception', 'no-answer', 'no-answer']);
		// Two time-outs in a row: the unit counts as silent.
		expect(events).toContain('unit-silent');
		expect(link.advice).toMatchObject({ code: 'unit-silent' });
		made.behaviour.silent.clear();
		made.behaviour.exceptions = [];
		aheadMs += 61_000;
		await until(() => ofTwo().length >= 5);
		expect(ofTwo().slice(3, 5)).toEqual([2_005, 2_005]);
		expect(events).toEqual(expect.arrayContaining(['unit-back', 'address-back']));
		expect(link.advice).toBeNull();
	});

	it('a gateway that says a unit does not answer is asked rarely for that unit, the others go on', async () => {
		const made = await device();
		made.behaviour.exceptions = [{ unitId: 2, from: 0, to: 300, code: 11 }];
		const { samples, link } = await open(
			made.port,
			[1, 2].map((unitId) => ({ key: unitId, address: at(5, { unitId }), intervalMs: 20 })),
		);
		await until(() => samples.filter((sample) => sample.key === 1).length >= 40);
		expect(made.log.filter((one) => one.unitId === 2).length).toBeLessThanOrEqual(3);
		expect(samples.find((sample) => sample.key === 2)?.fault).toMatchObject({ code: 'exception', exception: 11 });
		expect(link.advice).toMatchObject({ code: 'unit-silent' });
	});

	it('a device that answers in 700 ms is well with the default time-out, over one socket', async () => {
		const made = await device({ mostClients: 1 });
		made.behaviour.delayMs = 700;
		const { samples } = await open(made.port, wanted([at(0)], 500), { timeout_ms: 2_000 });
		await until(() => samples.length >= 3);
		expect(samples.every((sample) => sample.fault === null)).toBe(true);
	});

	it('a device that wants a pause between requests gets it', async () => {
		const made = await device();
		made.behaviour.gapMs = 40;
		const { samples } = await open(
			made.port,
			[1, 2, 3].map((unitId) => ({ key: unitId, address: at(0, { unitId }), intervalMs: 200 })),
			{ gap_ms: 50 },
		);
		await until(() => samples.length >= 9);
		expect(samples.every((sample) => sample.fault === null)).toBe(true);
	});

	it('an answer that comes byte by byte is whole: no zeros in the upper registers', async () => {
		const made = await device();
		made.behaviour.bytePauseMs = 2;
		const { samples } = await open(made.port, wanted([at(0), at(1), at(2), at(3)], 200), { timeout_ms: 1_000 });
		await until(() => samples.length >= 8);
		expect(samples.every((sample) => valueOf(sample) === 999 + sample.key)).toBe(true);
	});

	it('one junk byte costs one request, not the connection for ever', async () => {
		const made = await device();
		const { samples } = await open(made.port, wanted([at(0)]));
		await until(() => samples.length >= 2);
		made.behaviour.junk = Uint8Array.of(0xff);
		const before = samples.length;
		await until(() => samples.slice(before).filter((sample) => !sample.fault).length >= 5);
		expect(samples.filter((sample) => !sample.fault).every((sample) => valueOf(sample) === 1_000)).toBe(true);
	});

	it('three units asked in turn a thousand times never give each other’s values', async () => {
		const made = await device();
		const { samples } = await open(
			made.port,
			[1, 2, 3].map((unitId) => ({ key: unitId, address: at(5, { unitId }), intervalMs: 10 })),
		);
		await until(() => samples.length >= 1_000, 20_000);
		expect(samples.filter((sample) => valueOf(sample) !== sample.key * 1_000 + 5)).toEqual([]);
	}, 30_000);

	it('one silent unit does not hold up the others', async () => {
		const made = await device();
		made.behaviour.silent.add(2);
		const { samples, link, events } = await open(
			made.port,
			[1, 2, 3].map((unitId) => ({ key: unitId, address: at(5, { unitId }), intervalMs: 50 })),
		);
		await until(() => events.includes('unit-silent'));
		const from = performance.now();
		const before = samples.filter((sample) => sample.key === 1).length;
		await new Promise((resolve) => setTimeout(resolve, 2_000));
		const rounds = (performance.now() - from) / 50;
		expect(samples.filter((sample) => sample.key === 1).length - before).toBeGreaterThan(rounds * 0.9);
		expect(link.advice).toMatchObject({ code: 'unit-silent', text: 'Unit 2 does not answer.' });
		made.behaviour.silent.clear();
		await until(() => events.includes('unit-back'), 8_000);
		expect(link.advice).toBeNull();
	}, 20_000);

	it('RTU over TCP without transaction ids: a delayed answer does not answer the next request', async () => {
		const made = await device({ framing: 'rtu' });
		const { samples } = await open(
			made.port,
			[
				{ key: 1, address: at(0), intervalMs: 60 },
				{ key: 2, address: at(200), intervalMs: 60 },
			],
			{ transport: 'rtu-over-tcp' },
		);
		await until(() => samples.filter((sample) => !sample.fault).length >= 4);
		made.behaviour.hold = { request: made.requests + 1, until: made.requests + 2 };
		const before = samples.length;
		await until(() => samples.length > before + 20);
		expect(samples.filter((sample) => !sample.fault && valueOf(sample) !== (sample.key === 1 ? 1_000 : 1_200))).toEqual([]);
	});

	it('a reset connection is made again at once', async () => {
		const made = await device();
		const { samples } = await open(made.port, wanted([at(0)]));
		await until(() => samples.length >= 2);
		made.reset();
		const before = samples.length;
		await until(() => samples.slice(before).filter((sample) => !sample.fault).length >= 3, 3_000);
	});

	it('a device that is gone ends the link with advice', async () => {
		const made = await startModbusSimulator({ port: 0, image: countingImage });
		const { link } = await open(made.port, wanted([at(0)]));
		await made.stop();
		await expect(link.closed).rejects.toMatchObject({ advice: { code: 'refused' } });
	});
});

describe('testing before saving', () => {
	it('names each step and what it found', async () => {
		const made = await device();
		const { source } = await open(made.port, []);
		const report = await source.test(AbortSignal.timeout(5_000));
		expect(report).toMatchObject({
			ok: true,
			advice: null,
			steps: [
				{ name: 'Connection', ok: true },
				{ name: 'Unit 1', ok: true },
			],
		});
	});

	it('fails where the connection stands and the unit is silent, and passes where it answers with an exception', async () => {
		const made = await device();
		const { source } = await open(made.port, []);
		made.behaviour.silent.add(1);
		expect(await source.test(AbortSignal.timeout(5_000))).toMatchObject({ ok: false, advice: { code: 'units-silent' } });
		made.behaviour.silent.clear();
		made.behaviour.exceptions = [{ unitId: 1, from: 0, to: 10, code: 2 }];
		expect(await source.test(AbortSignal.timeout(5_000))).toMatchObject({ ok: true, advice: null });
	});

	it('says in a sentence what is wrong with an address nobody listens on', async () => {
		const source = createModbusSource(modbusSettings.parse({ host: '127.0.0.1', port: 1 }), {
			observer: { event: () => undefined, exchange: () => undefined, request: () => undefined, clockSkew: () => undefined },
			pkiFolder: '',
			installationId: 'test',
			now: Date.now,
		});
		expect(await source.test(AbortSignal.timeout(5_000))).toMatchObject({
			ok: false,
			advice: { code: 'refused', text: '127.0.0.1, port 1 refuses the connection.' },
		});
	});
});

describe('an independent reader', () => {
	it('mbpoll reads what our source reads, with reference 40108 as register 107 on the wire', async () => {
		if (!existsSync('/usr/bin/mbpoll')) throw new Error('mbpoll is not installed: apt-get install mbpoll (npm test does it)');
		const made = await device({ image: (_, __, register) => ({ 107: 555, 108: 0, 109: 100 })[register] ?? null });
		const printed = await new Promise<string>((resolve, reject) =>
			execFile(
				'/usr/bin/mbpoll',
				['-0', '-m', 'tcp', '-a', '1', '-t', '4', '-r', '107', '-c', '3', '-1', '-p', String(made.port), '127.0.0.1'],
				(error, stdout) => (error ? reject(error) : resolve(stdout)),
			),
		);
		expect([...printed.matchAll(/\[(\d+)\]:\s+(\d+)/g)].map((match) => [Number(match[1]), Number(match[2])])).toEqual([
			[107, 555],
			[108, 0],
			[109, 100],
		]);
		const { samples } = await open(
			made.port,
			wanted([107, 108, 109].map((register) => at(register, { table: 'holding-register' }))),
		);
		await until(() => samples.length >= 3);
		expect(samples.slice(0, 3).map((sample) => valueOf(sample))).toEqual([555, 0, 100]);
	});
});
