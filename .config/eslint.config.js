import js from '@eslint/js';
import svelte from 'eslint-plugin-svelte';
import tseslint from 'typescript-eslint';

export default tseslint.config(
	{
		ignores: [
			'**/node_modules/**',
			'build/**',
			'.svelte-kit/**',
			'.data/**',
			'.test/**',
			'.cache/**',
			'drizzle/**',
			'static/**',
			'test-results/**',
		],
	},
	js.configs.recommended,
	...tseslint.configs.recommended,
	...svelte.configs.recommended,
	{
		languageOptions: {
			globals: {
				process: 'readonly',
				Buffer: 'readonly',
				console: 'readonly',
				setTimeout: 'readonly',
				clearTimeout: 'readonly',
				setInterval: 'readonly',
				clearInterval: 'readonly',
				setImmediate: 'readonly',
				URL: 'readonly',
				URLSearchParams: 'readonly',
				TextEncoder: 'readonly',
				TextDecoder: 'readonly',
				AbortController: 'readonly',
				AbortSignal: 'readonly',
				Response: 'readonly',
				Request: 'readonly',
				Headers: 'readonly',
				fetch: 'readonly',
				performance: 'readonly',
				window: 'readonly',
				document: 'readonly',
				queueMicrotask: 'readonly',
				structuredClone: 'readonly',
			},
		},
		rules: {
			// The compiler knows every name; the linter's list of globals would only repeat it.
			'no-undef': 'off',
			'@typescript-eslint/no-unused-vars': [
				'error',
				{ argsIgnorePattern: '^_', varsIgnorePattern: '^_', caughtErrorsIgnorePattern: '^_' },
			],
			'@typescript-eslint/no-explicit-any': 'error',
			eqeqeq: ['error', 'always', { null: 'ignore' }],
			'no-console': 'off',
		},
	},
	{
		files: ['**/*.svelte', '**/*.svelte.ts'],
		languageOptions: { parserOptions: { parser: tseslint.parser } },
		rules: {
			// Every address inside the app is absolute and the app is served from the root; `resolve()` would only wrap it.
			'svelte/no-navigation-without-resolve': 'off',
			// Maps, sets and dates here are built anew inside a derivation and never changed afterwards; the rule cannot tell them from state.
			'svelte/prefer-svelte-reactivity': 'off',
		},
	},
	{
		files: ['src/lib/**/*.ts', 'src/routes/**/*.ts', 'src/collector/**/*.ts'],
		rules: { 'no-console': 'error' },
	},
);
