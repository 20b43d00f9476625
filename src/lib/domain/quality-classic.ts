// Pure.
import { STATUS_CODES } from './quality.ts';

/** Classic 8-bit quality QQSSSSLL and its StatusCode [OPC 10000-8 A.3.2.3 table A.3, A.4.3.3 table A.7]. */
const PAIRS: readonly (readonly [number, number])[] = [
	[192, STATUS_CODES.Good],
	[216, STATUS_CODES.GoodLocalOverride],
	[64, STATUS_CODES.Uncertain],
	[68, STATUS_CODES.UncertainLastUsableValue],
	[80, STATUS_CODES.UncertainSensorNotAccurate],
	[84, STATUS_CODES.UncertainEngineeringUnitsExceeded],
	[88, STATUS_CODES.UncertainSubNormal],
	[0, STATUS_CODES.Bad],
	[4, STATUS_CODES.BadConfigurationError],
	[8, STATUS_CODES.BadNotConnected],
	[12, STATUS_CODES.BadDeviceFailure],
	[16, STATUS_CODES.BadSensorFailure],
	[24, STATUS_CODES.BadNoCommunication],
	[28, STATUS_CODES.BadOutOfService],
	[32, STATUS_CODES.BadWaitingForInitialData],
];
/** LAST_KNOWN goes one way only: out of service comes back as 28. */
const LAST_KNOWN = 20;

/** StatusCode of a classic quality; the two limit bits carry over to bits 9:8. An unknown sub-status keeps its severity. */
export function classicToStatus(classic: number): number {
	const limit = (classic & 3) << 8;
	const main = classic & 0xfc;
	const pair = main === LAST_KNOWN ? STATUS_CODES.BadOutOfService : PAIRS.find(([code]) => code === main)?.[1];
	const severity =
		[STATUS_CODES.Bad, STATUS_CODES.Uncertain, STATUS_CODES.Bad, STATUS_CODES.Good][(classic >> 6) & 3] ?? STATUS_CODES.Bad;
	return ((pair ?? severity) | limit) >>> 0;
}

/** Classic quality of a StatusCode; a code without a classic form keeps its severity. */
export function statusToClassic(code: number): number {
	const limit = (code >>> 8) & 3;
	const main = (code & 0xffff0000) >>> 0;
	const pair = PAIRS.find(([, status]) => status === main)?.[0];
	const bySeverity = [192, 64, 0, 0][code >>> 30] ?? 0;
	return (pair ?? bySeverity) | limit;
}
