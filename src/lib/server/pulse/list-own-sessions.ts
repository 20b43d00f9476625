// Edge: pulse. May touch: web pool, select only.
import type { Pool } from '#lib/server/db/pool.ts';

/** A person's own sessions, newest first. The session's id is a hash and stays on the server. */
export async function listOwnSessions(
	pool: Pool,
	userId: string,
	current: string | null,
): Promise<{ startedAt: string; expiresAt: string; ip: string | null; userAgent: string | null; isCurrent: boolean }[]> {
	const { rows } = await pool.query(
		`SELECT id, created_at, expires_at, ip, user_agent FROM sessions WHERE user_id = $1 AND expires_at > now() ORDER BY created_at DESC LIMIT 100`,
		[userId],
	);
	return rows.map((row) => ({
		startedAt: row.created_at.toISOString(),
		expiresAt: row.expires_at.toISOString(),
		ip: row.ip,
		userAgent: row.user_agent,
		isCurrent: row.id === current,
	}));
}
