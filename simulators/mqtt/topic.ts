// Pure.

/** Topic of a wired value: site/area/machine/leaf, lower case, such as saltmere/high-lift/hl-3/flow. */
export function topicOf(signal: { site: string; area: string; path: string }): string {
	const [name = '', leaf = ''] = signal.path.split('.');
	return [signal.site, signal.area.replaceAll(' ', '-'), name, leaf].join('/').toLowerCase();
}
