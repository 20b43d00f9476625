// Pure.
const IDENTIFIER = /^(i=\d{1,10}|s=.{1,400}|g=[0-9A-Fa-f]{8}(-[0-9A-Fa-f]{4}){3}-[0-9A-Fa-f]{12}|b=[A-Za-z0-9+/]+={0,2})$/;

/** How a typed node id stands: by namespace URI, by index (to be resolved from the source), in namespace 0, or not a node id [OPC 10000-6 §5.3.1.10]. */
export function nodeIdForm(text: string): 'uri' | 'index' | 'standard' | 'wrong' {
	const uri = /^nsu=([^;]+);(.*)$/s.exec(text);
	if (uri) return IDENTIFIER.test(uri[2] ?? '') ? 'uri' : 'wrong';
	const index = /^ns=(\d{1,5});(.*)$/s.exec(text);
	if (index) return IDENTIFIER.test(index[2] ?? '') ? 'index' : 'wrong';
	return IDENTIFIER.test(text) ? 'standard' : 'wrong';
}

/** OPC UA NumericRange: `2`, `0:3`, several dimensions by comma [OPC 10000-4 §7.27]. */
export function isNumericRange(text: string): boolean {
	return text.split(',').every((part) => {
		const match = /^(\d+)(?::(\d+))?$/.exec(part);
		return match !== null && (match[2] === undefined || Number(match[1]) < Number(match[2]));
	});
}
