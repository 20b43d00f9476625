import { describe, expect, it } from 'vitest';
import type { Fault } from '../source.ts';
import { refusalAdvice } from './refusal-advice.ts';

const bad = (detail: string): Fault => ({ code: 'source-bad', detail });

describe('advice for refused nodes', () => {
	it('is none where none was refused', () => {
		expect(refusalAdvice([], 10)).toBeNull();
	});

	// Source of the names: OPC 10000-4 §5.13.2 (CreateMonitoredItems, operation level results) and §7.39.
	it.each<[Fault, string]>([
		[{ code: 'namespace-missing', detail: 'the server has no namespace urn:gone' }, 'namespace-missing'],
		[{ code: 'node-missing', detail: 'BadNodeIdUnknown' }, 'nodes-missing'],
		[{ code: 'node-missing', detail: '"Pump1" is not a node id' }, 'node-id-form'],
		[{ code: 'node-missing', detail: 'BadAttributeIdInvalid' }, 'nodes-without-value'],
		[{ code: 'undecodable', detail: 'a modbus address on an OPC UA source' }, 'address-kind'],
		[bad('BadUserAccessDenied'), 'nodes-not-allowed'],
		[bad('BadNotReadable'), 'nodes-not-allowed'],
		[bad('BadIndexRangeInvalid'), 'index-range'],
		[bad('BadTooManyMonitoredItems'), 'too-many-items'],
		[bad('BadFilterNotAllowed'), 'nodes-refused'],
	])('of %o is %s', (fault, code) => {
		expect(refusalAdvice([fault], 10)).toMatchObject({ code, text: expect.stringMatching(/^1 of 10 nodes /) });
	});

	it('tells every kind with its count, and what to check for the commonest', () => {
		const advice = refusalAdvice(
			[bad('BadNotReadable'), { code: 'node-missing', detail: 'BadNodeIdUnknown' }, bad('BadUserAccessDenied')],
			40,
		);
		expect(advice?.code).toBe('nodes-not-allowed');
		expect(advice?.text).toContain('2 of 40 nodes may not be read');
		expect(advice?.text).toContain('1 of 40 nodes cannot be found');
		expect(advice?.check).toContain('right to read');
	});
});
