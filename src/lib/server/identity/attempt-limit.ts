// Edge: identity. May touch: this process's memory.
import { RateLimiterMemory, RateLimiterRes } from 'rate-limiter-flexible';

const QUARTER_HOUR_S = 900;

/** Tries for one account from one address: a guesser is stopped, and nobody can lock another person out from elsewhere. */
const byAccount = new RateLimiterMemory({ keyPrefix: 'account', points: 10, duration: QUARTER_HOUR_S });
/** Tries from one address whatever the account. */
const byAddress = new RateLimiterMemory({ keyPrefix: 'address', points: 100, duration: QUARTER_HOUR_S });
/** Letters sent to one account. */
const byLetter = new RateLimiterMemory({ keyPrefix: 'letter', points: 5, duration: 3_600 });

async function take(limiter: RateLimiterMemory, key: string): Promise<number> {
	try {
		await limiter.consume(key);
		return 0;
	} catch (refused) {
		if (refused instanceof RateLimiterRes) return Math.max(1, Math.ceil(refused.msBeforeNext / 1_000));
		throw refused;
	}
}

function accountKey(email: string, ip: string): string {
	return `${email.trim().toLowerCase()} ${ip}`;
}

/** Counts a try before the password is looked at, so that tries side by side count too. Answers 0, or the seconds to wait. */
export async function countAttempt(email: string, ip: string): Promise<number> {
	return Math.max(await take(byAccount, accountKey(email, ip)), await take(byAddress, ip));
}

/** Forgets the tries of an account from an address, after the right password. */
export async function forgetAttempts(email: string, ip: string): Promise<void> {
	await byAccount.delete(accountKey(email, ip));
	await byAddress.reward(ip, 1);
}

/** Counts a letter that somebody asked for. Answers 0, or the seconds to wait. */
export async function countLetter(email: string, ip: string): Promise<number> {
	return Math.max(await take(byLetter, email.trim().toLowerCase()), await take(byAddress, ip));
}
