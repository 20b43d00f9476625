import type { Config } from 'tailwindcss';
import plugin from 'tailwindcss/plugin';

/*
 * Every colour of the interface. Ground, panel, line and ink are quiet; a hue appears only where something is wrong or can be pressed.
 * A mark has 3:1 against the panel, words have 4.5:1 ("ink" variants), in both themes.
 */
const light = {
	ground: 'oklch(0.972 0.006 225)',
	panel: 'oklch(1 0 0)',
	line: 'oklch(0.895 0.01 225)',
	'line-strong': 'oklch(0.82 0.014 225)',
	'line-field': 'oklch(0.62 0.02 230)',
	ink: 'oklch(0.25 0.03 245)',
	'ink-second': 'oklch(0.46 0.02 245)',
	water: 'oklch(0.5 0.1 222)',
	'water-deep': 'oklch(0.43 0.09 225)',
	'on-water': 'oklch(1 0 0)',
	strand: 'oklch(0.86 0.035 222)',
	station: 'oklch(0.62 0.08 222)',
	alert: 'oklch(0.62 0.15 62)',
	'alert-ink': 'oklch(0.5 0.12 60)',
	danger: 'oklch(0.56 0.21 28)',
	'danger-ink': 'oklch(0.5 0.2 28)',
	stale: 'oklch(0.55 0.06 295)',
	'stale-ink': 'oklch(0.48 0.07 295)',
	test: 'oklch(0.56 0.19 330)',
	'test-ink': 'oklch(0.5 0.19 330)',
	chosen: 'oklch(0.94 0.03 222)',
	hover: 'oklch(0.962 0.012 225)',
	shade: 'oklch(0.25 0.03 245 / 0.28)',
};

const dark: Record<keyof typeof light, string> = {
	ground: 'oklch(0.19 0.018 240)',
	panel: 'oklch(0.225 0.02 240)',
	line: 'oklch(0.32 0.02 240)',
	'line-strong': 'oklch(0.42 0.02 240)',
	'line-field': 'oklch(0.56 0.02 238)',
	ink: 'oklch(0.93 0.01 230)',
	'ink-second': 'oklch(0.7 0.015 235)',
	water: 'oklch(0.76 0.1 218)',
	'water-deep': 'oklch(0.83 0.09 216)',
	'on-water': 'oklch(0.2 0.02 240)',
	strand: 'oklch(0.36 0.045 225)',
	station: 'oklch(0.58 0.07 222)',
	alert: 'oklch(0.8 0.15 75)',
	'alert-ink': 'oklch(0.83 0.13 78)',
	danger: 'oklch(0.68 0.2 28)',
	'danger-ink': 'oklch(0.74 0.17 28)',
	stale: 'oklch(0.72 0.07 295)',
	'stale-ink': 'oklch(0.72 0.07 295)',
	test: 'oklch(0.74 0.17 330)',
	'test-ink': 'oklch(0.74 0.17 330)',
	chosen: 'oklch(0.3 0.04 225)',
	hover: 'oklch(0.26 0.022 240)',
	shade: 'oklch(0.1 0.02 240 / 0.6)',
};

const asVariables = (tokens: typeof light) =>
	Object.fromEntries(Object.entries(tokens).map(([name, value]) => [`--${name}`, value]));

export default {
	content: ['./src/**/*.{html,svelte,ts}'],
	theme: {
		colors: {
			transparent: 'transparent',
			current: 'currentColor',
			...Object.fromEntries(Object.keys(light).map((name) => [name, `var(--${name})`])),
		},
		extend: {
			fontFamily: {
				sans: ["'Archivo Variable'", 'system-ui', 'sans-serif'],
				mono: ["'Martian Mono Variable'", 'ui-monospace', 'monospace'],
			},
			borderRadius: { DEFAULT: '3px' },
			screens: { phone: { max: '699px' }, desk: '700px', wide: '1100px' },
		},
	},
	plugins: [
		plugin(({ addBase }) => {
			addBase({
				':root': { ...asVariables(light), 'color-scheme': 'light' },
				'[data-theme=dark]': { ...asVariables(dark), 'color-scheme': 'dark' },
				// Paper has no dark theme.
				'@media print': { ':root, [data-theme=dark]': asVariables(light) },
			});
		}),
	],
} satisfies Config;
