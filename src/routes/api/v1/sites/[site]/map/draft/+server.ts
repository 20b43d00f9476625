import { z } from 'zod';
import { csvToRows } from '#lib/domain/tag-map/csv.ts';
import { api, type SiteContext } from '#lib/server/http/api.ts';
import { CSV_TYPE } from '#lib/server/http/negotiate.ts';
import { badInput, Problem } from '#lib/server/http/problem.ts';
import { editDraft, type SentRow } from '#lib/server/tag-map/edit-draft.ts';
import { findDraft } from '#lib/server/tag-map/find-map.ts';
import { checkJson, csvAnswer, draftTag, rowJson, sentRow, versionOfTag } from '#lib/server/tag-map/map-json.ts';

const draftBody = z.strictObject({ rows: z.array(sentRow).max(100_000), convert: z.boolean().optional() });
type DraftBody = z.output<typeof draftBody>;

export const GET = api(
	{
		summary: 'The draft: the map as it would be published, with the version in the ETag.',
		permission: 'map:edit',
		answer: z.object({ version: z.int(), revision: z.int(), convert: z.boolean(), changes: z.int(), rows: z.array(rowJson) }),
		answerTypes: [CSV_TYPE],
	},
	async ({ db, site, answerType, headers }) => {
		const draft = await findDraft(db, site.id);
		headers.set('etag', draftTag(draft.version));
		if (answerType === CSV_TYPE) {
			return csvAnswer(
				draft.rows.filter((row) => row.state !== 'removed').map((row) => row.row),
				`${site.slug}-draft`,
			);
		}
		return {
			version: draft.version,
			revision: draft.revision,
			convert: draft.convert,
			changes: draft.changes,
			rows: draft.rows.map(({ row, rowVersion, state }) => ({ ...row, row_version: rowVersion, state })),
		};
	},
);

/** Rows from JSON, or from CSV with every bad cell named. */
async function sentRows(
	request: Request,
	body: DraftBody | undefined,
): Promise<{ rows: SentRow[]; convert: boolean | undefined }> {
	if (body) return { rows: body.rows.map(({ state: _, ...row }) => row as SentRow), convert: body.convert };
	const read = csvToRows(new Uint8Array(await request.arrayBuffer()));
	if (read.ok) return { rows: read.rows, convert: undefined };
	throw badInput(
		read.faults.map((fault) => ({
			pointer:
				fault.row === 0
					? `/header${fault.column ? `/${fault.column}` : ''}`
					: `/rows/${fault.row - 1}${fault.column ? `/${fault.column}` : ''}`,
			detail: `row ${fault.row === 0 ? 'of the header' : fault.row}${fault.column ? `, column ${fault.column}` : ''}: ${fault.detail}`,
		})),
	);
}

async function saveDraft(mode: 'replace' | 'merge', context: SiteContext<unknown, DraftBody | undefined>) {
	const { pool, site, request, body, actor, headers } = context;
	const { rows, convert } = await sentRows(request, body);
	const outcome = await editDraft(pool, {
		siteId: site.id,
		mode,
		rows,
		ifVersion: versionOfTag(request.headers.get('if-match')),
		...(convert === undefined ? {} : { convert }),
		by: actor.name,
	});
	if (outcome.ok) {
		headers.set('etag', draftTag(outcome.value.draft.version));
		return outcome.value.check;
	}
	switch (outcome.reason) {
		case 'draft-changed':
			throw new Problem(412, 'draft-changed', `Somebody else changed the draft: ${outcome.detail}. Read it again first.`);
		case 'row-changed':
			throw new Problem(409, 'row-changed', `${outcome.detail}. Nothing was saved.`, {
				extra: 'conflicts' in outcome ? { conflicts: outcome.conflicts } : {},
			});
		case 'unknown-row':
		case 'tag-missing':
			throw new Problem(409, outcome.reason, `${outcome.detail ?? ''}. Nothing was saved.`);
	}
}

const declaration = {
	permission: 'map:edit',
	body: draftBody,
	bodyTypes: [CSV_TYPE],
	answer: checkJson,
	refusals: [409, 412],
} as const;

export const PUT = api(
	{ ...declaration, summary: 'Replaces the draft; rows not sent are removed from it. Answers the check.' },
	(context) => saveDraft('replace', context),
);
export const PATCH = api({ ...declaration, summary: 'Merges rows into the draft by id or tag. Answers the check.' }, (context) =>
	saveDraft('merge', context),
);
