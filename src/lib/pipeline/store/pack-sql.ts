// Pure. The statement that makes blocks of readings; what it writes, the view `reading_history` reads back bit for bit.

/** Array columns of a block. */
export const ARRAYS = [
	'shift1',
	'shift2',
	'shift4',
	'lag1',
	'lag2',
	'lag8',
	'value_top',
	'value_high',
	'value_low',
	'value4',
	'value8',
	'qualities',
	'revisions',
	'hub_times',
	'source_ats',
	'reasons',
	'raws',
] as const;

/**
 * SQL that packs all rows of `source` (a FROM item with the columns of `readings`) into blocks of a tag and UTC hour; answers `n` of each.
 * Arrays that say the same all over are left out; numbers go into the narrowest element that holds them:
 * - times as what they differ from even steps, receipts as what they differ from a constant lag;
 * - values as float4 where all survive the way there and back, else as multiples of up to 53 bits of the power of two that is the last place of the smallest
 *   of them, checked element by element, else as they are.
 * The source is sorted once; grouping by a prefix of that order keeps it within each array.
 */
export function packStatement(source: string): string {
	return `
WITH sorted AS (
	SELECT s.tag_id, date_bin(interval '1 hour', s.at, timestamptz '2000-01-01 00:00:00+00') AS hour, s.at, s.value, s.quality, s.revision, s.is_hub_time, s.source_at, s.reason, s.raw,
		(extract(epoch FROM s.at - date_bin(interval '1 hour', s.at, timestamptz '2000-01-01 00:00:00+00')) * 1000)::integer AS ms,
		(extract(epoch FROM s.received_at - s.at) * 1000)::bigint AS lag
	FROM ${source} s
	ORDER BY s.tag_id, 2, s.at, s.value, s.quality
), grouped AS (
	SELECT tag_id, hour, count(*)::integer AS n, array_agg(ms) AS times, min(ms) AS first_ms,
		CASE WHEN count(*) > 1 THEN round((max(ms) - min(ms)) / (count(*) - 1.0))::integer ELSE 0 END AS step_ms,
		array_agg(lag) AS lags, min(lag) + (max(lag) - min(lag)) / 2 AS lag_ms, max(lag) - min(lag) AS lag_span,
		array_agg(value) AS vals, min(value) AS low, max(value) AS high, min(abs(value)) FILTER (WHERE value <> 0) AS least,
		bool_or(value IS NULL) AS has_gap, bool_and(value IS NULL) AS is_empty,
		bool_or(CASE WHEN value = 0 THEN float8send(value) <> '\\x0000000000000000'::bytea ELSE false END) AS has_minus_zero,
		bool_and(CASE WHEN value IS NULL OR value = 0 THEN true WHEN abs(value) BETWEEN 1.2e-38 AND 3.4e38 THEN value::real::float8 = value ELSE false END) AS fits_real,
		array_agg(quality) AS qualities, min(quality) AS quality, max(quality) AS top_quality,
		array_agg(revision) AS revisions, min(revision) AS revision, max(revision) AS last_revision,
		array_agg(is_hub_time) AS hub_times, bool_and(is_hub_time) AS is_hub_time, bool_or(is_hub_time) AS has_hub_time,
		CASE WHEN count(source_at) > 0 THEN array_agg(source_at) END AS source_ats,
		CASE WHEN count(reason) > 0 THEN array_agg(reason) END AS reasons,
		CASE WHEN count(raw) > 0 THEN array_agg(raw) END AS raws
	FROM sorted GROUP BY tag_id, hour
), measured AS (
	SELECT g.*, t.shifts, t.least_shift, t.most_shift, p.is_constant, b.value_base AS split_base, p.step AS split_step, v.tops, v.highs, v.lows, v.is_exact, v.has_top, v.has_high,
		(SELECT array_agg(x - g.lag_ms) FROM unnest(g.lags) AS x) AS own_lags
	FROM grouped g
	CROSS JOIN LATERAL (SELECT array_agg(d) AS shifts, min(d) AS least_shift, max(d) AS most_shift
		FROM (SELECT ms - g.first_ms - (place::integer - 1) * g.step_ms AS d FROM unnest(g.times) WITH ORDINALITY AS u (ms, place)) differences) t
	CROSS JOIN LATERAL (SELECT g.low = g.high AND NOT g.has_gap AND NOT g.has_minus_zero AS is_constant,
		CASE WHEN NOT g.has_gap AND NOT g.has_minus_zero AND NOT g.fits_real AND g.low < g.high
			AND g.least > 1e-250 AND greatest(abs(g.low), abs(g.high)) < least(CASE WHEN g.least < 1e250 THEN g.least * 1e6 ELSE 0 END, 1e250)
			THEN power(2.0::float8, floor(ln(g.least) / ln(2.0::float8)) - 52) END AS step OFFSET 0) p
	CROSS JOIN LATERAL (SELECT CASE WHEN p.step IS NOT NULL THEN CASE WHEN (g.high - g.low) / p.step < 9007199254740992
			THEN g.low + round((g.high - g.low) / 2 / p.step) * p.step END END AS value_base OFFSET 0) b
	CROSS JOIN LATERAL (SELECT array_agg(top::integer) AS tops, array_agg(high::smallint) AS highs, array_agg(low::integer) AS lows,
			bool_and(b.value_base + (top * 281474976710656.0::float8 + high * 4294967296.0::float8 + low) * p.step = x) AS is_exact, bool_or(top <> 0) AS has_top, bool_or(high <> 0) AS has_high
		FROM (SELECT x, top, high, k - top * 281474976710656.0 - high * 4294967296.0 AS low
			FROM (SELECT x, k, top, floor((k - top * 281474976710656.0 + 2147483648.0) / 4294967296.0) AS high
				FROM (SELECT x, k, floor((k + 140737488355328.0 + 2147483648.0) / 281474976710656.0) AS top
					FROM (SELECT x, round((x - b.value_base) / p.step) AS k FROM unnest(CASE WHEN b.value_base IS NOT NULL THEN g.vals END) AS x OFFSET 0) multiples OFFSET 0) tops OFFSET 0) halves OFFSET 0) parts) v
)
INSERT INTO reading_blocks (tag_id, n, hour, first_ms, step_ms, lag_ms, value_base, value_step, quality, revision, last_revision, retention_group, is_hub_time,
	${ARRAYS.join(', ')})
SELECT m.tag_id, n, hour, first_ms, step_ms, lag_ms,
	CASE WHEN is_empty THEN NULL WHEN is_constant THEN low WHEN fits_real THEN NULL WHEN is_exact THEN split_base END,
	CASE WHEN is_empty THEN NULL WHEN is_constant THEN 0 WHEN fits_real THEN NULL WHEN is_exact THEN split_step END,
	quality, revision, last_revision, coalesce(r.retention_group, 0), is_hub_time,
	CASE WHEN (least_shift <> 0 OR most_shift <> 0) AND least_shift >= -128 AND most_shift <= 127 THEN shifts::"char"[] END,
	CASE WHEN (least_shift < -128 OR most_shift > 127) AND least_shift >= -32768 AND most_shift <= 32767 THEN shifts::smallint[] END,
	CASE WHEN least_shift < -32768 OR most_shift > 32767 THEN shifts END,
	CASE WHEN lag_span BETWEEN 1 AND 254 THEN own_lags::integer[]::"char"[] END,
	CASE WHEN lag_span BETWEEN 255 AND 65534 THEN own_lags::smallint[] END,
	CASE WHEN lag_span > 65534 THEN own_lags END,
	CASE WHEN NOT is_constant AND NOT fits_real AND is_exact AND has_top THEN tops::"char"[] END,
	CASE WHEN NOT is_constant AND NOT fits_real AND is_exact AND has_high THEN highs END,
	CASE WHEN NOT is_constant AND NOT fits_real AND is_exact THEN lows END,
	CASE WHEN NOT is_empty AND NOT coalesce(is_constant, false) AND fits_real THEN vals::real[] END,
	CASE WHEN NOT is_empty AND NOT coalesce(is_constant, false) AND NOT fits_real AND NOT coalesce(is_exact, false) THEN vals END,
	CASE WHEN quality <> top_quality THEN qualities END,
	CASE WHEN revision <> last_revision THEN revisions END,
	CASE WHEN is_hub_time <> has_hub_time THEN hub_times END,
	source_ats, reasons, raws
FROM measured m LEFT JOIN tag_retention r ON r.tag_id = m.tag_id
RETURNING n`;
}
