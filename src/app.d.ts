import type { Actor } from '#lib/domain/access/can.ts';

declare global {
	namespace App {
		interface Locals {
			/** One a request; stands in the log and on error pages. */
			requestId: string;
			/** Who asks, by session cookie or bearer key; null when nobody is known. */
			actor: Actor | null;
			/** Hash of the session's token, for sign-out. */
			sessionId: string | null;
			/** Client address as the adapter reports it. */
			ip: string;
		}
		interface Error {
			message: string;
			errorId?: string;
		}
	}
}

export {};
