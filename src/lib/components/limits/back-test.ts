// Pure.
/** One limit over stored readings, as the API answers it. */
export interface BackTestLine {
	level: 'alert' | 'danger';
	kind: string;
	value: number | null;
	raises: number;
	alarm_s: number;
	longest_s: number;
	first_at: string | null;
	last_at: string | null;
	open: boolean;
}

/** What `POST /limits/back-test` answers. */
export interface BackTest {
	from: string;
	to: string;
	until: string;
	complete: boolean;
	readings: number;
	items: BackTestLine[];
	standing: BackTestLine[];
	skipped: { kind: string; level: string }[];
}
