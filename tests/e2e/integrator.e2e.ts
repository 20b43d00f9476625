import { expect, test } from '@playwright/test';
import { startModbusSimulator, type ModbusSimulator } from '../../simulators/modbus/modbus-simulator.ts';
import { admin, ask, makeKey, product, watchErrors } from './support.ts';

const PASSWORD = 'a long enough phrase for tests';
let device: ModbusSimulator;

test.describe.configure({ mode: 'serial' });

test.beforeAll(async () => {
	device = await startModbusSimulator({ port: 0, image: (_, __, register) => (register < 20 ? 100 + register : null) });
	admin(['site', 'add', '--slug', 'northbeck', '--name', 'Northbeck Intake', '--time-zone', 'Europe/London']);
	admin(['user', 'add', '--email', 'ira@northbeck.example', '--name', 'Ira', '--site', 'northbeck', '--role', 'integrator']);
	admin(['user', 'passwd', '--email', 'ira@northbeck.example'], `${PASSWORD}\n`);
	admin(['user', 'add', '--email', 'cora@northbeck.example', '--name', 'Cora', '--site', 'northbeck', '--role', 'controls']);
	admin(['user', 'passwd', '--email', 'cora@northbeck.example'], `${PASSWORD}\n`);
});
test.afterAll(async () => {
	await device.stop();
});

test('an integrator adds three sources by hand, maps a tag from each, publishes and sees values arrive', async ({ page }) => {
	const errors = watchErrors(page);
	const { env } = product();
	await page.goto('/sign-in');
	await page.getByLabel('E-mail address').fill('ira@northbeck.example');
	await page.getByLabel('Password').fill('not this one');
	await page.getByRole('button', { name: 'Sign in', exact: true }).click();
	await expect(page.getByRole('alert')).toBeVisible();
	await page.getByLabel('Password').fill(PASSWORD);
	await page.getByRole('button', { name: 'Sign in', exact: true }).click();
	await page.waitForURL(/northbeck/);
	errors.length = 0; // the refused password answered 400, as it should

	const sources: [string, RegExp, () => Promise<void>][] = [
		['Intake gateway', /OPC UA/, () => page.getByLabel('Endpoint').fill(`opc.tcp://127.0.0.1:${env.SIM_OPCUA_PORT}`)],
		[
			'Intake panel',
			/Modbus/,
			async () => {
				await page.getByLabel('Host').fill('127.0.0.1');
				await page.getByLabel('Port', { exact: true }).fill(String(device.port));
			},
		],
		['Intake broker', /MQTT/, () => page.getByRole('textbox', { name: 'Broker' }).fill(`mqtt://127.0.0.1:${env.SIM_MQTT_PORT}`)],
	];
	for (const [name, kind, fill] of sources) {
		await page.goto('/northbeck/sources/new');
		await page.locator('.kinds label').filter({ hasText: kind }).click();
		await page.getByLabel('Name', { exact: true }).fill(name);
		await fill();
		await page.getByRole('button', { name: 'Test', exact: true }).click();
		await expect(page.getByText(/press Test to see/)).toHaveCount(0, { timeout: 20_000 });
		await page.getByRole('button', { name: 'Save', exact: true }).click();
		await page.waitForURL(/sources\/[0-9a-f-]{36}/);
		await expect(page.getByRole('heading', { name })).toBeVisible();
	}

	await page.goto('/northbeck/tag-map');
	const csv = [
		'tag,source,unit,quantity,node_id,unit_id,table,register,data_type,interval_ms,topic,value_pointer,time_pointer',
		'INTAKE.TEMP,Intake gateway,Cel,temperature,nsu=urn:saltmere:gateway-a;s=HL-1.MDE.TEMP,,,,,1000,,,',
		'INTAKE.COUNT,Intake panel,1,count,,1,input-register,7,uint16,500,,,',
		'INTAKE.FLOW,Intake broker,m3/h,flow,,,,,,5000,saltmere/dosing/b-2/flow,/value,/time',
	].join('\r\n');
	await page.getByRole('button', { name: 'Import' }).first().click();
	await page.locator('input[type=file]').setInputFiles({ name: 'intake.csv', mimeType: 'text/csv', buffer: Buffer.from(csv) });
	await page.getByRole('dialog').getByRole('button', { name: 'Import' }).click();
	await expect(page.getByRole('grid')).toContainText('INTAKE.COUNT');
	await page.keyboard.press('Escape');

	await page.getByRole('button', { name: 'Publish', exact: true }).click();
	const dialog = page.getByRole('dialog');
	await dialog.getByRole('textbox').fill('first tags of the intake');
	await dialog.getByRole('button', { name: /Publish/ }).click();
	await expect(dialog).toHaveCount(0);
	await expect(page.getByText(/revision 1/i).first()).toBeVisible();
	const key = makeKey('intake script', 'northbeck', 'read');
	await expect
		.poll(
			async () =>
				(await ask<{ items: { tag: string; value: number | null }[] }>('/sites/northbeck/latest', key)).items
					.filter((item) => item.value !== null)
					.map((item) => item.tag)
					.sort(),
			{ timeout: 20_000 },
		)
		.toEqual(['INTAKE.COUNT', 'INTAKE.FLOW', 'INTAKE.TEMP']);
	await expect(page.getByRole('grid')).toContainText('107');
	expect(errors).toEqual([]);
});

test('a controls engineer sees a source fail, with what to check, and heal', async ({ page }) => {
	await page.goto('/sign-in');
	await page.getByLabel('E-mail address').fill('cora@northbeck.example');
	await page.getByLabel('Password').fill(PASSWORD);
	await page.getByRole('button', { name: 'Sign in', exact: true }).click();
	await page.waitForURL(/northbeck/);
	await page.goto('/northbeck/sources');
	await page.getByRole('link', { name: 'Intake panel' }).first().click();
	await expect(page.getByRole('heading', { name: 'Intake panel' })).toBeVisible();
	device.behaviour.silent.add(null);
	await expect(page.getByText(/check the unit id/i).first()).toBeVisible({ timeout: 40_000 });
	device.behaviour.silent.clear();
	const key = makeKey('intake watch', 'northbeck', 'read');
	await expect
		.poll(
			async () =>
				(await ask<{ items: { tag: string; stale: boolean }[] }>('/sites/northbeck/latest?tags=INTAKE.COUNT', key)).items[0]
					?.stale,
			{ timeout: 45_000 },
		)
		.toBe(false);
	await expect(page.getByText(/check the unit id/i)).toHaveCount(0, { timeout: 30_000 });
	// No right to change it, so nothing offers to.
	await expect(page.getByRole('button', { name: 'Edit', exact: true })).toHaveCount(0);
});
