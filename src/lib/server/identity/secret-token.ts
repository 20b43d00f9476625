// Edge: identity. May touch: randomness. Not: database.
import { randomBytes } from 'node:crypto';
import { sha256 } from '@oslojs/crypto/sha2';
import { encodeHexLowerCase } from '@oslojs/encoding';

/** 24 random bytes as 32 characters of `[A-Za-z0-9_-]`: 192 bits. */
export function newToken(): string {
	return randomBytes(24).toString('base64url');
}

/** SHA-256 in hex: what is stored in a token's place. Enough for random tokens, never for passwords. */
export function hashToken(token: string): string {
	return encodeHexLowerCase(sha256(new TextEncoder().encode(token)));
}
