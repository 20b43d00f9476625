// Pure.
import type { Advice, Fault } from '../source.ts';

interface Kind {
	code: string;
	/** How the fault is known: by its code, or by the StatusCode that the server gave [OPC 10000-4 §7.39]. */
	matches(fault: Fault): boolean;
	/** What is said of so many of all nodes. */
	words(nodes: string, sample: Fault): string;
	check: string;
}

const says =
	(...names: string[]) =>
	({ detail }: Fault) =>
		names.some((name) => detail?.includes(name));

/** From the particular to the general: a fault is of the first kind that it matches. */
const KINDS: readonly Kind[] = [
	{
		code: 'namespace-missing',
		matches: ({ code }) => code === 'namespace-missing',
		words: (nodes, { detail }) => `${nodes} cannot be found: ${detail ?? 'the server does not have their namespace'}.`,
		check: 'Check that this is the server that was mapped; a device that was replaced may name its namespace otherwise.',
	},
	{
		code: 'address-kind',
		matches: ({ code }) => code === 'undecodable',
		words: (nodes, { detail }) => `${nodes} cannot be asked for: ${detail ?? 'their addresses are of another kind'}.`,
		check: 'Give those rows an OPC UA address, or the source that they belong to.',
	},
	{
		code: 'node-id-form',
		matches: says('is not a node id', 'BadNodeIdInvalid'),
		words: (nodes) => `${nodes} cannot be asked for: the node id is not well formed.`,
		check: 'Browse the server and pick the node, which writes its id as it must be.',
	},
	{
		code: 'nodes-without-value',
		matches: says('BadAttributeIdInvalid'),
		words: (nodes) => `${nodes} cannot be read: no value belongs to a node of that kind.`,
		check: 'Browse the server and map the variable below that node instead.',
	},
	{
		code: 'nodes-missing',
		matches: ({ code }) => code === 'node-missing',
		words: (nodes) => `${nodes} cannot be found on the server.`,
		check: 'Check whether its configuration changed; browse it and map the nodes anew, or take the rows out.',
	},
	{
		code: 'nodes-not-allowed',
		matches: says('BadUserAccessDenied', 'BadNotReadable', 'BadSecurityModeInsufficient'),
		words: (nodes, { detail }) => `${nodes} may not be read (${detail}).`,
		check:
			'Have whoever runs the server give this user the right to read them, or sign in as another user or with more security.',
	},
	{
		code: 'index-range',
		matches: says('BadIndexRange'),
		words: (nodes, { detail }) => `${nodes} cannot be read by the index range given (${detail}).`,
		check: 'Compare the index range in the tag map with the length of the array on the server.',
	},
	{
		code: 'too-many-items',
		matches: says('BadTooMany', 'BadOutOfMemory', 'BadResourceUnavailable'),
		words: (nodes, { detail }) => `${nodes} cannot be subscribed to: the server has no room for more (${detail}).`,
		check: 'Close other clients or raise the server’s limit of monitored items; rows that nobody needs can be taken out.',
	},
	{
		code: 'nodes-refused',
		matches: () => true,
		words: (nodes, { code, detail }) => `${nodes} are refused by the server (${detail ?? code}).`,
		check: 'Look in the server’s own log for why; they are asked for again once a minute.',
	},
];

/** What is wrong with the nodes that a server refused, each kind with its count; what to check is of the commonest. Null where none was. */
export function refusalAdvice(faults: readonly Fault[], total: number): Advice | null {
	const found = KINDS.map((kind) => ({ kind, own: [] as Fault[] }));
	for (const fault of faults) found.find(({ kind }) => kind.matches(fault))?.own.push(fault);
	const kinds = found.filter(({ own }) => own.length > 0).sort((a, b) => b.own.length - a.own.length);
	const [first] = kinds;
	if (!first) return null;
	const text = kinds.map(({ kind, own }) => kind.words(`${own.length} of ${total} nodes`, own[0] as Fault)).join(' ');
	return { code: first.kind.code, text, check: first.kind.check };
}
