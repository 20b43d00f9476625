// Edge: machines. May touch: area, machine, measuring-point and tag tables.
import { sql } from 'drizzle-orm';
import { ok, refuse, type Outcome } from '#lib/domain/outcome.ts';
import { recordAudit, type AuditActor } from '#lib/server/audit/record.ts';
import type { Db, Pool } from '#lib/server/db/pool.ts';
import { inTransaction } from '#lib/server/db/transaction.ts';

export interface Machine {
	id: number;
	name: string;
	area: string | null;
	description: string | null;
	data: Record<string, unknown>;
	version: number;
	points: { id: number; name: string; description: string | null; data: Record<string, unknown> }[];
	tags: number;
}

export interface MachineInput {
	name: string;
	area?: string | null | undefined;
	description?: string | null | undefined;
	data?: Record<string, unknown> | undefined;
	points?: { name: string; description?: string | null | undefined; data?: Record<string, unknown> | undefined }[] | undefined;
}

interface Caller {
	siteId: number;
	actor: AuditActor;
	ip: string | null;
}

/** Machines of a site by area and name, with their measuring points and how many tags they carry; one of them where `id` is given. */
export async function listMachines(db: Db, siteId: number, id?: number): Promise<Machine[]> {
	const found = await db.execute<Omit<Machine, never> & Record<string, unknown>>(
		sql`SELECT m.id, m.name, a.name AS area, m.description, m.data, m.version,
				coalesce((SELECT jsonb_agg(jsonb_build_object('id', p.id, 'name', p.name, 'description', p.description, 'data', p.data) ORDER BY p.id)
					FROM measuring_points p WHERE p.machine_id = m.id), '[]'::jsonb) AS points,
				(SELECT count(*)::int FROM tags t WHERE t.machine_id = m.id AND t.published_at IS NOT NULL AND t.retired_at IS NULL) AS tags
			FROM machines m LEFT JOIN areas a ON a.id = m.area_id
			WHERE m.site_id = ${siteId} AND m.deleted_at IS NULL AND (${id ?? null}::int IS NULL OR m.id = ${id ?? null}::int)
			ORDER BY a.name NULLS LAST, lower(m.name)`,
	);
	return found.rows;
}

/** Creates a machine with its measuring points. Refuses 'name-taken' for a name that the site has, whatever the case. */
export async function createMachine(pool: Pool, input: MachineInput, caller: Caller): Promise<Outcome<Machine, 'name-taken'>> {
	return inTransaction(pool, async (db) => {
		const areaId = await areaOf(db, caller.siteId, input.area);
		const made = await db.execute<{ id: number }>(
			sql`INSERT INTO machines (site_id, area_id, name, description, data)
				VALUES (${caller.siteId}, ${areaId}, ${input.name}, ${input.description ?? null}, ${JSON.stringify(input.data ?? {})}::jsonb)
				ON CONFLICT DO NOTHING RETURNING id`,
		);
		const id = made.rows[0]?.id;
		if (id === undefined) return refuse('name-taken', `this site has a machine named "${input.name}" already`);
		await savePoints(db, id, input.points ?? []);
		const [machine] = await listMachines(db, caller.siteId, id);
		if (!machine) throw new Error('a machine just made is not there');
		await audit(db, caller, 'machine.created', machine, null);
		return ok(machine);
	});
}

/** Changes what is given. Refuses 'not-found', 'name-taken', and 'stale' when `version` is not the one that stands. */
export async function updateMachine(
	pool: Pool,
	id: number,
	input: Partial<MachineInput> & { version?: number | undefined },
	caller: Caller,
): Promise<Outcome<Machine, 'not-found' | 'name-taken' | 'stale'>> {
	return inTransaction(pool, async (db) => {
		await db.execute(sql`SELECT 1 FROM machines WHERE id = ${id} FOR UPDATE`);
		const [before] = await listMachines(db, caller.siteId, id);
		if (!before) return refuse('not-found');
		if (input.version !== undefined && input.version !== before.version) {
			return refuse('stale', `the machine is at version ${before.version}, you saw ${input.version}`);
		}
		if (input.name !== undefined && input.name.toLowerCase() !== before.name.toLowerCase()) {
			const taken = await db.execute(
				sql`SELECT 1 FROM machines WHERE site_id = ${caller.siteId} AND lower(name) = lower(${input.name}) AND deleted_at IS NULL AND id <> ${id}`,
			);
			if ((taken.rowCount ?? 0) > 0) return refuse('name-taken', `this site has a machine named "${input.name}" already`);
		}
		const areaId = input.area === undefined ? sql`area_id` : sql`${await areaOf(db, caller.siteId, input.area)}::int`;
		await db.execute(
			sql`UPDATE machines SET name = ${input.name ?? before.name}, area_id = ${areaId},
					description = ${input.description === undefined ? before.description : input.description},
					data = data || ${JSON.stringify(input.data ?? {})}::jsonb, version = version + 1
				WHERE id = ${id}`,
		);
		if (input.points) await savePoints(db, id, input.points);
		const [after] = await listMachines(db, caller.siteId, id);
		if (!after) throw new Error('a machine just changed is not there');
		await audit(db, caller, 'machine.changed', after, before);
		return ok(after);
	});
}

/** Removes a machine that no published tag names. Refuses 'not-found', and 'in-use' with the count. */
export async function deleteMachine(pool: Pool, id: number, caller: Caller): Promise<Outcome<null, 'not-found' | 'in-use'>> {
	return inTransaction(pool, async (db) => {
		const [before] = await listMachines(db, caller.siteId, id);
		if (!before) return refuse('not-found');
		if (before.tags > 0) return refuse('in-use', `${before.tags} published ${before.tags === 1 ? 'tag names' : 'tags name'} it`);
		await db.execute(sql`UPDATE machines SET deleted_at = now() WHERE id = ${id}`);
		await audit(db, caller, 'machine.deleted', before, before, null);
		return ok(null);
	});
}

async function areaOf(db: Db, siteId: number, name: string | null | undefined): Promise<number | null> {
	if (!name?.trim()) return null;
	await db.execute(sql`INSERT INTO areas (site_id, name) VALUES (${siteId}, ${name.trim()}) ON CONFLICT DO NOTHING`);
	const found = await db.execute<{ id: number }>(
		sql`SELECT id FROM areas WHERE site_id = ${siteId} AND lower(name) = lower(${name.trim()})`,
	);
	return found.rows[0]?.id ?? null;
}

/** Adds points and updates those of the same name; a point is never taken away here, since tags may sit on it. */
async function savePoints(db: Db, machineId: number, points: NonNullable<MachineInput['points']>): Promise<void> {
	for (const point of points) {
		await db.execute(
			sql`INSERT INTO measuring_points (machine_id, name, description, data)
				VALUES (${machineId}, ${point.name}, ${point.description ?? null}, ${JSON.stringify(point.data ?? {})}::jsonb)
				ON CONFLICT (machine_id, lower(name)) DO UPDATE SET description = coalesce(excluded.description, measuring_points.description),
					data = measuring_points.data || excluded.data`,
		);
	}
}

async function audit(
	db: Db,
	caller: Caller,
	action: string,
	subject: Machine,
	before: Machine | null,
	after: Machine | null = subject,
): Promise<void> {
	await recordAudit(db, {
		...caller,
		action,
		subjectKind: 'machine',
		subjectId: subject.id,
		subjectName: subject.name,
		before,
		after,
	});
}
