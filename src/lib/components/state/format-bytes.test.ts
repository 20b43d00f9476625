import { describe, expect, it } from 'vitest';
import { bytesText } from './format-bytes.ts';

describe('a size', () => {
	it('has three digits at most, in powers of a thousand', () => {
		expect([0, 12, 999, 1_000, 9_411_000_000, 12_345_678, 999_600, 123_456_789_000_000].map(bytesText)).toEqual([
			'0 B',
			'12 B',
			'999 B',
			'1.00 kB',
			'9.41 GB',
			'12.3 MB',
			'1.00 MB',
			'123 TB',
		]);
	});
});
