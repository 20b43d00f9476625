import { fail } from '@sveltejs/kit';
import { z } from 'zod';
import { LEAST_ROW_DAYS, MOST_DAYS, retentionSchema, type Retention } from '#lib/domain/retention.ts';
import { QUANTITIES } from '#lib/domain/tag-map/row.ts';
import { webDb, webPool } from '#lib/server/db/database.ts';
import { sites } from '#lib/server/db/schema/site.ts';
import { requirePermission } from '#lib/server/identity/require.ts';
import { addRule, removeRule, saveRetention } from '#lib/server/store/change-retention.ts';
import { readStore } from '#lib/server/store/read-store.ts';
import { readRetention } from '#lib/pipeline/store/retention.ts';
import type { Actions, PageServerLoad } from './$types';

export const load: PageServerLoad = async ({ locals, depends }) => {
	requirePermission(locals, null, 'store:edit');
	depends('millrace:store');
	const [report, places] = await Promise.all([
		readStore(webPool(), Date.now()),
		webDb().select({ id: sites.id, name: sites.name }).from(sites).orderBy(sites.name),
	]);
	return { title: 'Store and retention', report, places, quantities: [...QUANTITIES] };
};

/** What the acts answer: words for all, faults by field, and the word that an act which throws data away asks to be typed. */
interface Said {
	message: string;
	faults: Record<string, string>;
	mustConfirm: boolean;
}
const said = (message: string, faults: Record<string, string> = {}, mustConfirm = false): Said => ({
	message,
	faults,
	mustConfirm,
});

const FIELDS = Object.keys(retentionSchema.shape) as (keyof Retention)[];
/** A plain whole number as somebody types it; anything else is refused, never rounded. */
const wholeDays = z
	.string()
	.regex(/^\d{1,6}$/)
	.transform(Number);
const expected = (least: number) => `a whole number of days from ${least} to ${MOST_DAYS.toLocaleString('en')}`;
const LEAST: Partial<Record<keyof Retention, number>> = { rowDays: LEAST_ROW_DAYS, rawDays: LEAST_ROW_DAYS };

export const actions: Actions = {
	retention: async ({ locals, request }) => {
		const actor = requirePermission(locals, null, 'store:edit');
		const data = await request.formData();
		const faults: Record<string, string> = {};
		const sent: Partial<Retention> = {};
		for (const field of FIELDS) {
			const days = wholeDays.pipe(retentionSchema.shape[field]).safeParse(data.get(field));
			if (days.success) sent[field] = days.data;
			else faults[field] = expected(LEAST[field] ?? 1);
		}
		if (Object.keys(faults).length > 0) return fail(400, said('Some fields are not valid.', faults));
		const retention = sent as Retention;
		const before = await readRetention(webPool());
		const isShorter = FIELDS.some((field) => field !== 'rowDays' && retention[field] < before[field]);
		if (isShorter && data.get('confirm') !== 'drop')
			return fail(409, said('What is older than the new days is dropped and cannot be brought back.', {}, true));
		const done = await saveRetention(webPool(), retention, { actor, ip: locals.ip });
		if (done.ok) return said('The retention is in force; what is past it is dropped within the hour.');
		const [field = '', ...words] = (done.detail ?? '').split(' ');
		return fail(400, said('Two of the fields contradict each other.', { [field]: words.join(' ') }));
	},
	addRule: async ({ locals, request }) => {
		const actor = requirePermission(locals, null, 'store:edit');
		const data = await request.formData();
		const days = wholeDays.pipe(z.int().min(LEAST_ROW_DAYS).max(MOST_DAYS)).safeParse(data.get('days'));
		if (!days.success) return fail(400, said('The rule was not added.', { days: expected(LEAST_ROW_DAYS) }));
		const { rowDays, rawDays } = await readRetention(webPool());
		if (days.data < rowDays) return fail(400, said('The rule was not added.', { days: `at least the ${rowDays} days of rows` }));
		const quantity = z.enum(QUANTITIES).safeParse(data.get('quantity'));
		const site = z.coerce.number().int().min(1).safeParse(data.get('site'));
		if (days.data < rawDays && data.get('confirm') !== 'drop')
			return fail(409, said('What is older than the rule’s days is dropped and cannot be brought back.', {}, true));
		const done = await addRule(
			webPool(),
			{
				siteId: site.success ? site.data : null,
				quantity: quantity.success ? quantity.data : null,
				rawDays: days.data,
			},
			{ actor, ip: locals.ip },
		);
		if (done.ok) return said('The rule is in force; packed days move under it in the background.');
		const REFUSALS = {
			'site-unknown': 'This site is no longer there.',
			'rule-taken': 'There is a rule for this already; remove it first.',
			'rule-empty': 'Choose a site, a quantity or both; for everything there are the days above.',
		} as const;
		return fail(done.reason === 'rule-empty' ? 400 : 409, said(REFUSALS[done.reason]));
	},
	removeRule: async ({ locals, request }) => {
		const actor = requirePermission(locals, null, 'store:edit');
		const data = await request.formData();
		const id = z.coerce.number().int().min(1).safeParse(data.get('id'));
		if (!id.success) return fail(404, said('This rule is no longer there.'));
		const mayDrop = data.get('confirm') === 'drop';
		const done = await removeRule(webPool(), id.data, { actor, ip: locals.ip, mayDrop });
		if (done.ok) return said('The rule is gone; its tags are kept as the others are.');
		if (done.reason === 'would-drop')
			return fail(
				409,
				said('Without this rule, what is older than the others’ days is dropped and cannot be brought back.', {}, true),
			);
		return fail(404, said('This rule is no longer there.'));
	},
};
