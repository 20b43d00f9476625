import { describe, expect, it } from 'vitest';
import { adviceOf, skewWords } from './advice.ts';
import { resolveNodeId, toStoredNodeId } from './namespace.ts';

const NAMESPACES = ['http://opcfoundation.org/UA/', 'urn:app', 'urn:plant'];

describe('node ids', () => {
	it('are kept by namespace URI and found again wherever its index has moved', () => {
		expect(resolveNodeId('nsu=urn:plant;s=A;B', NAMESPACES)).toEqual({ ok: true, nodeId: 'ns=2;s=A;B' });
		expect(resolveNodeId('nsu=urn:plant;s=A', [...NAMESPACES].reverse())).toEqual({ ok: true, nodeId: 'ns=0;s=A' });
		expect(resolveNodeId('i=2258', NAMESPACES)).toEqual({ ok: true, nodeId: 'i=2258' });
	});

	it('are refused where the server has no such namespace, never guessed', () => {
		expect(resolveNodeId('nsu=urn:other;s=A', NAMESPACES)).toMatchObject({ ok: false, reason: 'namespace-missing' });
		expect(resolveNodeId('Pump1', NAMESPACES)).toMatchObject({ ok: false, reason: 'node-id-form' });
	});

	it('come back as they are stored', () => {
		expect(toStoredNodeId('ns=2;s=A', NAMESPACES)).toBe('nsu=urn:plant;s=A');
		expect(toStoredNodeId('ns=0;i=2258', NAMESPACES)).toBe('i=2258');
		expect(toStoredNodeId('i=85', NAMESPACES)).toBe('i=85');
	});
});

describe('advice', () => {
	it.each([
		['connect ECONNREFUSED 127.0.0.1:4840', 'refused'],
		['getaddrinfo ENOTFOUND gateway', 'name-unknown'],
		['BadIdentityTokenRejected (0x80210000)', 'user-refused'],
		['BadTooManySessions', 'too-many-sessions'],
		['BadCertificateTimeInvalid', 'certificate-expired'],
		['BadSecurityChecksFailed', 'own-certificate-refused'],
		['no-such-security', 'no-such-security'],
		['the server did not answer within 10 s', 'no-answer'],
		['something else', 'unreachable'],
	])('%s is %s', (message, code) => {
		expect(adviceOf(message, 'opc.tcp://gateway:4840').code).toBe(code);
	});

	it('speaks of a clock only when it is apart', () => {
		expect(skewWords(5_000)).toBeNull();
		expect(skewWords(400_000)).toContain('400 s ahead');
	});
});
