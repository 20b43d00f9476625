// Pure.
import type { z } from 'zod';
import type { SitePermission } from '#lib/domain/access/permission.ts';
import type { AnswerType } from './negotiate.ts';

/** What an endpoint says of itself: it authorises, validates and documents by this. */
export interface Declaration<
	Q extends z.ZodObject = z.ZodObject,
	B extends z.ZodType = z.ZodType,
	A extends z.ZodType = z.ZodType,
> {
	/** One sentence for the reader of `openapi.json`. */
	summary: string;
	/** Right at the site; `signed-in` for anybody known, `public` for everybody. Site endpoints name a right. */
	permission: SitePermission | 'signed-in' | 'public';
	/** A strict object: what it does not name is an error. Absent: no parameters at all. */
	query?: Q;
	/** Of the JSON body. Absent: the endpoint takes none (or reads `request` itself by `bodyTypes`). */
	body?: B;
	/** The body may be left out; then `{}` is parsed. */
	bodyOptional?: boolean;
	/** Content types other than JSON that the handler reads from `request` itself; then `body` comes as undefined. */
	bodyTypes?: readonly string[];
	/** Of the JSON answer. Absent with status 204. */
	answer?: A;
	status?: 200 | 201 | 204;
	/** What else can be asked for by `Accept`; JSON comes first. */
	answerTypes?: readonly AnswerType[];
	/** Statuses of its own refusals beside 400, 401, 403, 404 and 429. */
	refusals?: readonly (409 | 410 | 412 | 503)[];
}
