// Edge: identity. May touch: argon2 (native, off the main thread). Not: database.
import { hash, verify } from '@node-rs/argon2';
import { newToken } from './secret-token.ts';

/** Argon2id with 19 MiB, two passes, one lane: one of the equal choices of the OWASP password storage guide. */
const ARGON2ID = { memoryCost: 19_456, timeCost: 2, parallelism: 1 } as const;

let nobody: Promise<string> | undefined;

/** One form for passwords typed on different keyboards [NIST SP 800-63B §5.1.1.2: NFKC]. Nothing is cut off. */
function normalized(password: string): string {
	return password.normalize('NFKC');
}

/** The encoded hash, parameters and salt included. */
export async function hashPassword(password: string): Promise<string> {
	return hash(normalized(password), ARGON2ID);
}

/** True when the password fits. Without a stored hash it works as long and says no, so that time tells nothing of who exists. */
export async function passwordFits(stored: string | null, password: string): Promise<boolean> {
	nobody ??= hashPassword(newToken());
	const fits = await verify(stored ?? (await nobody), normalized(password));
	return stored !== null && fits;
}
