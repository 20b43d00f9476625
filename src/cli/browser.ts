// Edge: cli. May touch: Debian's Chromium. A headless browser that looks nothing up on its own.
import { chromium, type Browser } from '@playwright/test';

/** Starts it. Throws when Chromium is not installed. */
export function openBrowser(): Promise<Browser> {
	return chromium.launch({
		executablePath: '/usr/bin/chromium',
		args: [
			'--no-sandbox', // root has no other way; only pages of this machine are opened
			'--disable-gpu',
			'--disable-quic',
			'--no-first-run',
			'--disable-background-networking',
			'--disable-component-update',
			'--disable-sync',
		],
	});
}
