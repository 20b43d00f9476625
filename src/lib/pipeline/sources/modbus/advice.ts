// Pure.
import type { Advice } from '../source.ts';

/** What a failure to reach a Modbus device means and what to look at first. */
export function connectAdvice(error: { code?: string | undefined; message: string }, place: string): Advice {
	switch (error.code) {
		case 'ECONNREFUSED':
			return {
				code: 'refused',
				text: `${place} refuses the connection.`,
				check:
					'Check the port, and that the device’s Modbus server is switched on; it may also allow one connection only, which another program holds.',
			};
		case 'ENOTFOUND':
		case 'EAI_AGAIN':
			return {
				code: 'name-unknown',
				text: `No host of that name is known: ${place}.`,
				check: 'Check the spelling, or give the address in numbers.',
			};
		case 'EHOSTUNREACH':
		case 'ENETUNREACH':
			return {
				code: 'no-route',
				text: `There is no way to ${place}.`,
				check: 'Check the network cable, the address and the route between the networks.',
			};
		case 'ETIMEDOUT':
			return {
				code: 'no-answer',
				text: `${place} does not answer.`,
				check: 'Check that the device has power and that no firewall stands between; a switched-off device looks the same.',
			};
		case 'ECONNRESET':
		case 'EPIPE':
			return {
				code: 'dropped',
				text: `${place} drops the connection.`,
				check: 'Check whether another program is connected: a device may allow one connection only and drop the older one.',
			};
		case 'ENOENT':
		case 'EACCES':
			return {
				code: 'no-serial-port',
				text: `The serial port ${place} cannot be opened.`,
				check: 'Check its path, and that this user may use it.',
			};
		default:
			return {
				code: 'unreachable',
				text: `${place} cannot be reached: ${error.message}.`,
				check: 'Check address, port and cable.',
			};
	}
}

/** A connection that stands while nothing on it answers. */
export function silentAdvice(place: string, units: readonly number[], timeoutMs: number): Advice {
	const which = units.length === 1 ? `unit ${units[0]}` : `none of units ${units.join(', ')}`;
	return {
		code: 'units-silent',
		text: `${place} takes the connection, but ${which} ${units.length === 1 ? 'does not answer' : 'answers'} within ${timeoutMs} ms.`,
		check:
			'Check the unit id first, then that the unit behind the gateway has its supply; a slow device may need a longer time-out.',
	};
}

/** One unit among several that does not answer. */
export function unitAdvice(unit: number, others: number): string {
	return `Unit ${unit} does not answer${others > 0 ? `, while ${others} other ${others === 1 ? 'unit does' : 'units do'}` : ''}. Check its supply and that its unit id is still ${unit}.`;
}
