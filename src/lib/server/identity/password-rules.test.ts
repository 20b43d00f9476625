import { describe, expect, it } from 'vitest';
import { findPasswordFault } from './password-rules.ts';

const person = { email: 'ines.marsh@example.org', name: 'Ines Marsh' };

describe('a new password', () => {
	it.each([
		['seven characters are too few', 'k3uzw9q', 'too-short'],
		['a known word', 'password', 'common'],
		['a known word in the usual disguise', 'P@ssw0rd!', 'common'],
		['a known word with a year', 'Welcome2026', 'common'],
		['the same character all along', 'aaaaaaaaaaaa', 'common'],
		['figures in their order', '12345678', 'common'],
		['a row of the keyboard', 'qwertyuiop', 'common'],
		['a word twice', 'adminadmin', 'common'],
		['the own name', 'InesMarsh1', 'personal'],
		['more than a thousand characters', 'x7'.repeat(501), 'too-long'],
	])('%s is refused', (_what, password, fault) => {
		expect(findPasswordFault(password, person)).toBe(fault);
	});

	it.each(['gravel lantern sixteen', 'sumpfdotterblume', 'vk7 82mzq', 'пароль-длинный', '四字熟語四字熟語です'])(
		'"%s" is taken, without any rule of composition',
		(password) => {
			expect(findPasswordFault(password, person)).toBeNull();
		},
	);
});
