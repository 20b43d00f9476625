// Pure.
/**
 * Quality is an OPC UA StatusCode whatever the source was [OPC 10000-4 §7.39].
 *
 *   31 30 | 29 28 | 27 ........ 16 | 15 14 | 13 12 | 11 10 | 9 8   | 7        | 6 5 | 4 ... 0
 *   sever.|       | sub-code       | S  S  |       | info  | limit | overflow |     | historian
 *
 * Severity 0 is good, 1 uncertain, 2 and 3 bad. A good value may carry sub-codes and bits, so severity is never an equality with 0.
 *
 * Source of the table: the standard's own StatusCode list (Schema/StatusCode.csv of the published node sets).
 */
export const STATUS_CODES = {
	Good: 0x00000000,
	GoodOverload: 0x002f0000,
	GoodClamped: 0x00300000,
	GoodLocalOverride: 0x00960000,
	GoodNoData: 0x00a50000,
	GoodMoreData: 0x00a60000,
	Uncertain: 0x40000000,
	UncertainNoCommunicationLastUsableValue: 0x408f0000,
	UncertainLastUsableValue: 0x40900000,
	UncertainSubstituteValue: 0x40910000,
	UncertainInitialValue: 0x40920000,
	UncertainSensorNotAccurate: 0x40930000,
	UncertainEngineeringUnitsExceeded: 0x40940000,
	UncertainSubNormal: 0x40950000,
	UncertainDataSubNormal: 0x40a40000,
	UncertainOverRange: 0x40f20000,
	UncertainUnderRange: 0x40f30000,
	UncertainSimulatedValue: 0x42090000,
	UncertainSensorCalibration: 0x420a0000,
	Bad: 0x80000000,
	BadUnexpectedError: 0x80010000,
	BadInternalError: 0x80020000,
	BadCommunicationError: 0x80050000,
	BadDecodingError: 0x80070000,
	BadTimeout: 0x800a0000,
	BadServerNotConnected: 0x800d0000,
	BadUserAccessDenied: 0x801f0000,
	BadNoCommunication: 0x80310000,
	BadWaitingForInitialData: 0x80320000,
	BadNodeIdInvalid: 0x80330000,
	BadNodeIdUnknown: 0x80340000,
	BadAttributeIdInvalid: 0x80350000,
	BadNotReadable: 0x803a0000,
	BadNotWritable: 0x803b0000,
	BadOutOfRange: 0x803c0000,
	BadNotSupported: 0x803d0000,
	BadTypeMismatch: 0x80740000,
	BadNoSubscription: 0x80790000,
	BadSequenceNumberUnknown: 0x807a0000,
	BadMessageNotAvailable: 0x807b0000,
	BadRequestTimeout: 0x80850000,
	BadConfigurationError: 0x80890000,
	BadNotConnected: 0x808a0000,
	BadDeviceFailure: 0x808b0000,
	BadSensorFailure: 0x808c0000,
	BadOutOfService: 0x808d0000,
	BadDeadbandFilterInvalid: 0x808e0000,
	BadNoData: 0x809b0000,
	BadDataLost: 0x809d0000,
	BadDataUnavailable: 0x809e0000,
	BadConnectionClosed: 0x80ae0000,
	BadNoDataAvailable: 0x80b10000,
} as const;

export type StatusName = keyof typeof STATUS_CODES;
export type Severity = 'good' | 'uncertain' | 'bad';

/** Quality as the API and the screens show it: `code` unsigned, `name` as in the standard's table. */
export interface QualityJson {
	code: number;
	name: string;
	severity: Severity;
}

const NAME_BY_SUBCODE = new Map<number, StatusName>(
	(Object.entries(STATUS_CODES) as [StatusName, number][]).map(([name, code]) => [code >>> 16, name]),
);

/** The code as PostgreSQL's int4 keeps it: the same 32 bits, signed. */
export function toStored(code: number): number {
	return code | 0;
}

/** The code as the standard writes it, from either form. */
export function toUnsigned(code: number): number {
	return code >>> 0;
}

/** Severity from bits 31:30 of either form. */
export function severityOf(code: number): Severity {
	const bits = code >>> 30;
	return bits === 0 ? 'good' : bits === 1 ? 'uncertain' : 'bad';
}

/** True for severity good, whatever bits come with it. */
export function isGood(code: number): boolean {
	return code >>> 30 === 0;
}

/** True for severity bad (and the reserved fourth severity, which nobody should send). */
export function isBad(code: number): boolean {
	return code >>> 30 >= 2;
}

/** Name by sub-code; an unknown sub-code is named by its severity, never dropped. */
export function statusNameOf(code: number): string {
	const known = NAME_BY_SUBCODE.get(code >>> 16);
	if (known) return known;
	const severity = severityOf(code);
	return severity === 'good' ? 'Good' : severity === 'uncertain' ? 'Uncertain' : 'Bad';
}

/** The three faces of a quality, as every answer shows them. */
export function qualityJson(code: number): QualityJson {
	return { code: code >>> 0, name: statusNameOf(code), severity: severityOf(code) };
}

/** Rank for "worst quality": higher is worse. */
export function severityRank(code: number): number {
	return Math.min(code >>> 30, 2);
}
