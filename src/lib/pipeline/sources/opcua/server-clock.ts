// Edge: sources. May touch: node-opcua. How far a server's clock is from ours.
import { AttributeIds } from 'node-opcua';
import type { SourceContext } from '../source.ts';
import type { OpenSession } from './session.ts';

/** The server's clock minus ours, milliseconds; null where it does not tell. Half the way there is taken off. */
export async function readSkew(open: OpenSession, context: SourceContext): Promise<number | null> {
	const begun = performance.now();
	const read = await open.session.read({ nodeId: 'i=2258', attributeId: AttributeIds.Value });
	const time: unknown = read.value.value;
	return time instanceof Date ? time.getTime() - (context.now() - (performance.now() - begun) / 2) : null;
}
