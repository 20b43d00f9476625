// Pure.
/** Namespace of EUInformation by UN/CEFACT common codes [OPC 10000-8 §5.6.3.3]. */
export const CEFACT_NAMESPACE = 'http://www.opcfoundation.org/UA/units/un/cefact';

/** unitId of a UN/CEFACT common code: its ASCII bytes packed big-endian; -1 for none [OPC 10000-8 §5.6.3.3]. */
export function unitIdOf(commonCode: string): number {
	if (!/^[A-Z0-9]{1,3}$/.test(commonCode)) return -1;
	let id = 0;
	for (const char of commonCode) id = (id << 8) | char.charCodeAt(0);
	return id;
}

/** UN/CEFACT common codes of the UCUM units that machine-condition data comes in. Bare g is ambiguous there: K40 is gravity, GRM the gram. */
export const CEFACT_OF_UCUM: Readonly<Record<string, string>> = {
	'mm/s': 'C16',
	'[in_i]/s': 'IU',
	'm/s2': 'MSK',
	'[g]': 'K40',
	Cel: 'CEL',
	'[degF]': 'FAH',
	K: 'KEL',
	um: '4H',
	'[mil_i]': '77',
	'[in_i]': 'INH',
	mm: 'MMT',
	Hz: 'HTZ',
	'/min': 'RPM',
	V: 'VLT',
	mV: '2Z',
	'%': 'P1',
	dB: '2N',
	'dB{mW}': 'DBM',
	A: 'AMP',
	mA: '4K',
	'mm/s2': 'M41',
	'm/s': 'MTS',
	h: 'HUR',
	d: 'DAY',
	kW: 'KWT',
	bar: 'BAR',
};

/** UCUM code of an EUInformation's unitId; null for one that is not in the table. */
export function ucumOfUnitId(unitId: number): string | null {
	for (const [code, common] of Object.entries(CEFACT_OF_UCUM)) if (unitIdOf(common) === unitId) return code;
	return null;
}
