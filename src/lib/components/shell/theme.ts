// Interface. May touch: the document, one cookie.
export type Theme = 'system' | 'light' | 'dark';

/** What the person chose; the cookie is read before the first paint (src/app.html). */
export function readTheme(): Theme {
	const found = /(?:^|; )theme=(light|dark)/.exec(document.cookie)?.[1];
	return found === 'light' || found === 'dark' ? found : 'system';
}

/** Keeps the choice for a year, in this browser, and puts it in force at once. */
export function chooseTheme(theme: Theme): void {
	document.cookie =
		theme === 'system' ? 'theme=; path=/; max-age=0; samesite=lax' : `theme=${theme}; path=/; max-age=31536000; samesite=lax`;
	const isDark = theme === 'system' ? matchMedia('(prefers-color-scheme: dark)').matches : theme === 'dark';
	document.documentElement.dataset.theme = isDark ? 'dark' : 'light';
}
