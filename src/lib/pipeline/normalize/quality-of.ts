// Pure.
import { STATUS_CODES } from '#lib/domain/quality.ts';
import type { Reason } from '#lib/domain/reason.ts';
import type { Fault } from '#lib/pipeline/sources/source.ts';

/** A quality with the reason that a program can read; null for plainly good. */
export interface Judged {
	quality: number;
	reason: Reason | null;
}

export const GOOD: Judged = { quality: STATUS_CODES.Good, reason: null };

/** Quality of a sample that brought no value, by why. Modbus exceptions by what they say of address, device and path [Modbus AP v1.1b3 §7]. */
export function qualityOfFault(fault: Fault): Judged {
	if (fault.code === 'exception') {
		const reason = EXCEPTION_REASONS[fault.exception] ?? 'exception-4';
		switch (fault.exception) {
			case 1:
			case 2:
			case 3:
				return { quality: STATUS_CODES.BadConfigurationError, reason };
			case 5:
			case 6:
			case 10:
			case 11:
				return { quality: STATUS_CODES.BadNoCommunication, reason };
			default:
				return { quality: STATUS_CODES.BadDeviceFailure, reason };
		}
	}
	switch (fault.code) {
		case 'no-answer':
			return { quality: STATUS_CODES.BadCommunicationError, reason: 'no-answer' };
		case 'no-connection':
		case 'source-offline':
			return { quality: STATUS_CODES.BadNoCommunication, reason: fault.code };
		case 'node-missing':
			return { quality: STATUS_CODES.BadNodeIdUnknown, reason: 'node-missing' };
		case 'namespace-missing':
			return { quality: STATUS_CODES.BadConfigurationError, reason: 'namespace-missing' };
		case 'undecodable':
			return { quality: STATUS_CODES.BadDecodingError, reason: 'undecodable' };
		case 'source-bad':
			return { quality: STATUS_CODES.Bad, reason: 'source-bad' };
	}
}

const EXCEPTION_REASONS: Readonly<Record<number, Reason>> = {
	1: 'exception-1',
	2: 'exception-2',
	3: 'exception-3',
	4: 'exception-4',
	5: 'exception-5',
	6: 'exception-6',
	8: 'exception-8',
	10: 'exception-10',
	11: 'exception-11',
};
