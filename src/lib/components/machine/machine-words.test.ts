import { expect, test } from 'vitest';
import { drivenKind, numberOrNull, SHAPES } from './machine-words.ts';

test.each([
	['pump-set', 'pump'],
	['fan-pump', 'pump'],
	['blower', 'fan'],
	['felt-roll', 'roll'],
	['steam-trap', null],
])('a %s is drawn as %s', (kind, driven) => {
	expect(drivenKind({ kind })).toBe(driven);
	expect(SHAPES.some((shape) => shape.value === kind)).toBe(true);
});

test('a number is typed with a point or a comma, nothing is nothing, and words are refused', () => {
	expect(numberOrNull(' 1,5 ')).toBe(1.5);
	expect(numberOrNull('')).toBeNull();
	expect(numberOrNull('fast')).toBeUndefined();
	expect(numberOrNull('-3')).toBeUndefined();
});
