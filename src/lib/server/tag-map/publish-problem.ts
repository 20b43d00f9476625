// Edge: tag map. May touch: http problems.
import type { Outcome } from '#lib/domain/outcome.ts';
import type { DraftCheck } from '#lib/domain/tag-map/row.ts';
import { Problem } from '#lib/server/http/problem.ts';
import type { Published } from './publish-draft.ts';

/** The answer of a publish or restore, or the problem that says why not. */
export function publishOrProblem(outcome: Outcome<Published> & { check?: DraftCheck }): Published {
	if (outcome.ok) return outcome.value;
	switch (outcome.reason) {
		case 'has-errors':
			throw new Problem(409, 'has-errors', 'The map still has rows in error. Mend them, then publish.', {
				extra: outcome.check ? { check: outcome.check } : {},
			});
		case 'draft-changed':
			throw new Problem(
				409,
				'draft-changed',
				`Somebody changed the draft: ${outcome.detail ?? ''}. Look at the new difference first.`,
			);
		case 'unknown-revision':
			throw new Problem(404, 'revision-not-found', `This site's map has no such revision: ${outcome.detail ?? ''}.`);
		default:
			throw new Problem(409, outcome.reason, `Nothing was published: ${outcome.detail ?? outcome.reason}.`);
	}
}
