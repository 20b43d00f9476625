// Pure.
import { bytesToHex } from '#lib/pipeline/decode/registers.ts';
import { exceptionWords } from './exception-code.ts';
import type { Table } from './read-plan.ts';

/** Function code that reads a table [Modbus AP v1.1b3 §6]. */
export const READ_FUNCTION: Record<Table, number> = { coil: 1, 'discrete-input': 2, 'holding-register': 3, 'input-register': 4 };

/** A read request's PDU with its unit id, for the event log: unit, function, start, count. */
export function requestBytes(unitId: number, table: Table, start: number, count: number): string {
	const fc = READ_FUNCTION[table];
	return bytesToHex(Uint8Array.of(unitId, fc, start >> 8, start & 255, count >> 8, count & 255));
}

/** The request in words: `FC 04, unit 7, registers 200–223`. */
export function requestWords(unitId: number, table: Table, start: number, count: number): string {
	const noun = table === 'coil' ? 'coil' : table === 'discrete-input' ? 'input' : 'register';
	return `FC ${String(READ_FUNCTION[table]).padStart(2, '0')}, unit ${unitId}, ${noun}${count === 1 ? ` ${start}` : `s ${start}–${start + count - 1}`}`;
}

/** An exception answer's bytes and meaning. */
export function exceptionExchange(unitId: number, table: Table, code: number): { bytes: string; meaning: string } {
	return { bytes: bytesToHex(Uint8Array.of(unitId, READ_FUNCTION[table] | 0x80, code)), meaning: exceptionWords(code) };
}
