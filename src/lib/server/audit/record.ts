// Edge: audit. May touch: audit table, insert and select only, in the caller's transaction.
import type { Actor } from '#lib/domain/access/can.ts';
import type { Db } from '#lib/server/db/pool.ts';
import { auditEntries } from '#lib/server/db/schema/audit.ts';

/** Who did it: a person or key that asked, a command at the console, or the system by itself. */
export type AuditActor = Actor | { kind: 'command' | 'system'; name: string };

export interface AuditInput {
	/** Null for what concerns the whole installation. */
	siteId: number | null;
	actor: AuditActor;
	ip: string | null;
	/** Past tense, `subject.happened`: `source.created`, `limit.changed`, `alarm.acknowledged`. */
	action: string;
	subjectKind: string;
	subjectId?: string | number | null;
	subjectName?: string | null;
	/** JSON values without secrets. */
	before?: unknown;
	after?: unknown;
	note?: string | null;
}

/** Members that never enter the log, at whatever depth. */
const SECRET = /^(password|passwordHash|password_hash|secret|secrets|key|keyHash|token)$/;

function withoutSecrets(value: unknown): unknown {
	if (Array.isArray(value)) return value.map(withoutSecrets);
	if (value === null || typeof value !== 'object' || value instanceof Date) return value;
	return Object.fromEntries(
		Object.entries(value).map(([name, inner]) => [name, SECRET.test(name) ? '(not shown)' : withoutSecrets(inner)]),
	);
}

/** Writes one entry. Give it the transaction that makes the change, so that neither stands without the other. */
export async function recordAudit(db: Db, entry: AuditInput): Promise<void> {
	await db.insert(auditEntries).values({
		siteId: entry.siteId,
		actorKind: entry.actor.kind,
		actorId: 'id' in entry.actor ? entry.actor.id : null,
		actorName: entry.actor.name,
		ip: entry.ip,
		action: entry.action,
		subjectKind: entry.subjectKind,
		subjectId: entry.subjectId == null ? null : String(entry.subjectId),
		subjectName: entry.subjectName ?? null,
		before: withoutSecrets(entry.before ?? null),
		after: withoutSecrets(entry.after ?? null),
		note: entry.note ?? null,
	});
}
