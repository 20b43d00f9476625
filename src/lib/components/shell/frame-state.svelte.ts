// Interface. May touch: nothing outside the page.

/** A key that works on the page shown now, for the help. */
export interface PageKey {
	keys: string;
	does: string;
}

/** What the frame and the page share: which overlay is open and the page's own keys. */
export const frameState = $state({ isPaletteOpen: false, isHelpOpen: false, pageKeys: [] as PageKey[] });

/** Names the page's keys for the help while the page is shown; call during the page's start. */
export function usePageKeys(keys: PageKey[]): void {
	$effect(() => {
		frameState.pageKeys = keys;
		return () => (frameState.pageKeys = []);
	});
}

/** True when keys belong to what is being typed in. */
export function isTyping(event: KeyboardEvent): boolean {
	const target = event.target as HTMLElement | null;
	return !!target?.closest('input, textarea, select, [contenteditable], [role=grid]');
}
