declare module '@lhncbc/ucum-lhc' {
	interface UcumLhcUtils {
		convertUnitTo(
			from: string,
			value: number,
			to: string,
		): { status: 'succeeded' | 'failed' | 'error'; toVal: number | null; msg: string[] };
		validateUnitString(
			code: string,
			suggest?: boolean,
		): { status: 'valid' | 'invalid' | 'error'; ucumCode: string | null; msg: string[] };
	}
	const ucum: { UcumLhcUtils: { getInstance(): UcumLhcUtils } };
	export default ucum;
	export type { UcumLhcUtils };
}
