// Pure.
import type { Advice } from '../source.ts';

/** What a failure to reach an OPC UA server means and what to look at first; known by what the error says. */
export function adviceOf(message: string, place: string): Advice {
	const says = (...words: string[]) => words.some((word) => message.includes(word));
	if (says('ECONNREFUSED'))
		return {
			code: 'refused',
			text: `${place} refuses the connection.`,
			check: 'Check the port in the address, and that the OPC UA server runs.',
		};
	if (says('ENOTFOUND', 'EAI_AGAIN'))
		return {
			code: 'name-unknown',
			text: `No host of that name is known: ${place}.`,
			check: 'Check the spelling, or give the address in numbers.',
		};
	if (says('EHOSTUNREACH', 'ENETUNREACH'))
		return {
			code: 'no-route',
			text: `There is no way to ${place}.`,
			check: 'Check the network cable, the address and the route between the networks.',
		};
	if (says('BadIdentityTokenRejected', 'BadUserAccessDenied', 'BadIdentityTokenInvalid'))
		return {
			code: 'user-refused',
			text: `${place} refuses the user name or password.`,
			check: 'Check both with whoever runs the server, and that this user may read.',
		};
	if (says('BadTooManySessions'))
		return {
			code: 'too-many-sessions',
			text: `${place} has no free session.`,
			check: 'Close other clients, or wait until their sessions run out; small devices allow few.',
		};
	if (says('BadCertificateTimeInvalid'))
		return {
			code: 'certificate-expired',
			text: `The certificate of ${place} is not valid today.`,
			check: 'Check the clocks of both machines, then have the server’s certificate renewed.',
		};
	if (
		says(
			'BadCertificateUntrusted',
			'BadSecurityChecksFailed',
			'BadCertificateUriInvalid',
			'BadCertificateUseNotAllowed',
			'BadCertificateInvalid',
		)
	)
		return {
			code: 'own-certificate-refused',
			text: `${place} does not trust Millrace’s certificate.`,
			check: 'On the server, move Millrace’s certificate from the rejected to the trusted ones, then connect again.',
		};
	if (says('no-such-security', 'Cannot find an Endpoint', 'BadSecurityPolicyRejected', 'BadSecurityModeRejected'))
		return {
			code: 'no-such-security',
			text: `${place} does not offer this security mode and policy.`,
			check: 'Choose one that the server offers; the test lists them.',
		};
	if (says('ETIMEDOUT', 'imeout', 'did not answer', 'premature'))
		return {
			code: 'no-answer',
			text: `${place} does not answer.`,
			check: 'Check that the device has power and that no firewall stands between.',
		};
	if (says('ECONNRESET', 'ended', 'closed', 'lost', 'BadConnectionClosed', 'BadSessionClosed'))
		return {
			code: 'dropped',
			text: `${place} dropped the connection.`,
			check: 'Check whether the server restarted; if it happens again and again, look at its own log.',
		};
	return {
		code: 'unreachable',
		text: `${place} cannot be reached: ${message.split('\n')[0]?.slice(0, 160) ?? ''}.`,
		check: 'Check the address and the server’s own log.',
	};
}

/** Words for a clock that is apart from ours. */
export function skewWords(ms: number): string | null {
	if (Math.abs(ms) < 30_000) return null;
	return `the server’s clock is ${Math.round(Math.abs(ms) / 1_000)} s ${ms > 0 ? 'ahead of' : 'behind'} ours; set it, or give the source a fixed offset`;
}
