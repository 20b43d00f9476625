// Edge: sources. May touch: node-opcua. What a node holds, for mapping by hand.
import { AttributeIds, BrowseDirection, type ClientSession, DataType, NodeClass, type ReferenceDescription } from 'node-opcua';
import { ucumOfUnitId } from '#lib/pipeline/normalize/units/eu-information.ts';
import type { BrowseItem } from '../source.ts';
import { resolveNodeId, toStoredNodeId } from './namespace.ts';

const OBJECTS = 'i=85';
/** References that lead down the tree: Organizes, HasComponent, HasProperty and their kin. */
const HIERARCHICAL = 'HierarchicalReferences';

/** Children of a node, at most 1,000, with unit and range where the server tells them. */
export async function browseNode(
	session: ClientSession,
	namespaces: readonly string[],
	node: string | null,
): Promise<BrowseItem[]> {
	const resolved = resolveNodeId(node ?? OBJECTS, namespaces);
	if (!resolved.ok) throw new Error(resolved.detail);
	const references = await childrenOf(session, resolved.nodeId);
	const shown = references
		.filter((reference) => reference.nodeClass === NodeClass.Object || reference.nodeClass === NodeClass.Variable)
		.slice(0, 1_000);
	return Promise.all(
		shown.map(async (reference): Promise<BrowseItem> => {
			const nodeId = reference.nodeId.toString();
			const isValue = reference.nodeClass === NodeClass.Variable;
			const item: BrowseItem = {
				node: toStoredNodeId(nodeId, namespaces),
				name: reference.displayName.text ?? reference.browseName.name ?? nodeId,
				hasChildren: !isValue,
				isValue,
			};
			return isValue ? { ...item, ...(await valueFacts(session, nodeId)) } : item;
		}),
	);
}

async function childrenOf(session: ClientSession, nodeId: string): Promise<ReferenceDescription[]> {
	const first = await session.browse({
		nodeId,
		browseDirection: BrowseDirection.Forward,
		referenceTypeId: HIERARCHICAL,
		includeSubtypes: true,
		nodeClassMask: 0,
		resultMask: 63,
	});
	const references = [...(first.references ?? [])];
	let point = first.continuationPoint;
	while (point && point.length > 0 && references.length < 1_000) {
		const next = await session.browseNext(point, false);
		references.push(...(next.references ?? []));
		point = next.continuationPoint;
	}
	return references;
}

async function valueFacts(session: ClientSession, nodeId: string): Promise<Partial<BrowseItem>> {
	const facts: Partial<BrowseItem> = {};
	try {
		const value = await session.read({ nodeId, attributeId: AttributeIds.Value });
		facts.dataType = DataType[value.value.dataType] ?? null;
		facts.value = value.value.value === null || value.value.value === undefined ? null : String(value.value.value).slice(0, 60);
		for (const property of await childrenOf(session, nodeId)) {
			if (property.browseName.name !== 'EngineeringUnits' && property.browseName.name !== 'EURange') continue;
			const read = await session.read({ nodeId: property.nodeId, attributeId: AttributeIds.Value });
			const body = read.value.value as { unitId?: number; displayName?: { text?: string }; low?: number; high?: number } | null;
			if (property.browseName.name === 'EngineeringUnits')
				facts.unit = (body?.unitId === undefined ? null : ucumOfUnitId(body.unitId)) ?? body?.displayName?.text ?? null;
			else {
				facts.low = body?.low ?? null;
				facts.high = body?.high ?? null;
			}
		}
	} catch {
		// A node that cannot be read is still shown by its name.
	}
	return facts;
}
