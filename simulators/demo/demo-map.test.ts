// Pure.
import { describe, expect, it } from 'vitest';
import { limitSchema } from '#lib/domain/limit.ts';
import { sourceInput } from '#lib/domain/source-settings.ts';
import { mapRowSchema, TAG_NAME } from '#lib/domain/tag-map/row.ts';
import { demoLimits } from './demo-limits.ts';
import { demoRows, demoSites, demoSources } from './demo-map.ts';

describe('the map of the demo plant', () => {
	it.each(['saltmere', 'corran'] as const)('has rows, limits and sources of the right shape at %s', (site) => {
		const rows = demoRows(site);
		const names = new Set(
			demoSources({ opcua: 1, modbus: 2, rtu: 3, mqtt: 4 }).map(({ source }) => sourceInput.parse(source).name),
		);
		for (const row of rows) {
			expect(mapRowSchema.safeParse(row).error, row.tag).toBeUndefined();
			expect(row.tag).toMatch(TAG_NAME);
			expect(names).toContain(row.source);
		}
		const tags = new Set(rows.map((row) => row.tag));
		expect(tags.size).toBe(rows.length);
		for (const row of rows) if (row.age_tag) expect(tags).toContain(row.age_tag);
		for (const limit of demoLimits(site)) {
			expect(limitSchema.safeParse(limit).error, limit.tag).toBeUndefined();
			expect(tags).toContain(limit.tag);
		}
	});

	it('gives no two values of a device the same place', () => {
		for (const { slug } of demoSites()) {
			const places = demoRows(slug)
				.filter((row) => row.unit_id != null)
				.map((row) => `${row.source} ${row.unit_id} ${row.register} ${row.bit}`);
			expect(new Set(places).size).toBe(places.length);
		}
	});

	// Source: ISO 20816-3 group 1 rigid and flexible, ISO 10816-7 category I above 200 kW; boundaries from memory.
	it('sets velocity limits at the zone boundaries', () => {
		const limits = demoLimits('saltmere');
		const values = (tag: string) => limits.filter((limit) => limit.tag === tag).map((limit) => limit.value);
		expect(values('HL-3.MDE.H.VEL')).toEqual([4.5, 7.1]);
		expect(values('HL-5.MDE.H.VEL')).toEqual([7.1, 11]);
		expect(values('HL-3.PDE.H.VEL')).toEqual([5, 7.6]);
	});
});
