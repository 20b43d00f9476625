// Edge: sources. May touch: modbus-serial through link.ts. The named steps of a test, on a socket of its own or on the running one.
import type { ModbusSettings } from '#lib/domain/source-settings.ts';
import type { TestReport, TestStep } from '../source.ts';
import { connectAdvice, silentAdvice } from './advice.ts';
import { exceptionWords } from './exception-code.ts';
import { requestWords } from './frame.ts';
import { ModbusLink, placeOf, type ReadOutcome } from './link.ts';
import type { ReadBlock } from './read-plan.ts';

/** Before anything is mapped nobody knows which units there are: the first is asked for one register. An exception is an answer too. */
export async function testDevice(settings: ModbusSettings, signal: AbortSignal): Promise<TestReport> {
	const link = new ModbusLink(settings);
	const begun = performance.now();
	try {
		await link.connect();
	} catch (error) {
		const advice = connectAdvice(error as Error & { code?: string }, placeOf(settings));
		return { ok: false, steps: [{ name: 'Connection', ok: false, detail: advice.text }], advice };
	}
	const steps: TestStep[] = [
		{ name: 'Connection', ok: true, detail: `${placeOf(settings)} is open`, ms: Math.round(performance.now() - begun) },
	];
	const step = await testUnit(link, 1, signal);
	link.drop();
	steps.push(step.ok ? step : { ...step, detail: `${step.detail}; other units can be asked once tags are mapped to them` });
	return { ok: step.ok, steps, advice: step.ok ? null : silentAdvice(placeOf(settings), [1], settings.timeout_ms) };
}

/** Asks a unit of which nothing is mapped for one register. */
export async function testUnit(link: ModbusLink, unitId: number, signal: AbortSignal): Promise<TestStep> {
	const name = `Unit ${unitId}`;
	if (signal.aborted) return { name, ok: false, detail: 'not asked, the time was up' };
	const outcome = await link.read(unitId, 'input-register', 0, 1);
	const ms = Math.round(outcome.ms);
	if (outcome.kind === 'answer') return { name, ok: true, detail: `answers in ${ms} ms`, ms };
	if (outcome.kind === 'exception')
		// Every exception proves that somebody lives there, but those by which a gateway says that nobody does.
		return { name, ok: outcome.code !== 10 && outcome.code !== 11, detail: `answers with ${exceptionWords(outcome.code)}`, ms };
	return { name, ok: false, detail: failureWords(outcome), ms };
}

/** Asks a unit for what is mapped of it. */
export async function testBlock(link: ModbusLink, block: ReadBlock): Promise<TestStep> {
	const outcome = await link.read(block.unitId, block.table, block.start, block.count);
	const ms = Math.round(outcome.ms);
	const asked = requestWords(block.unitId, block.table, block.start, block.count);
	const detail = outcome.kind === 'answer' ? `${asked} answered in ${ms} ms` : failureWords(outcome);
	return { name: `Unit ${block.unitId}`, ok: outcome.kind === 'answer', detail, ms };
}

function failureWords(outcome: Exclude<ReadOutcome, { kind: 'answer' }>): string {
	switch (outcome.kind) {
		case 'exception':
			return exceptionWords(outcome.code);
		case 'timeout':
			return `no answer in ${Math.round(outcome.ms)} ms`;
		case 'broken':
			return outcome.detail;
	}
}
