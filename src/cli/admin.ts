// Edge: cli. May touch: server functions, child processes. No rule of its own. Entry of `npm run admin`.
// Answers go to standard output as JSON lines or text; log lines must not come between.
process.env.MILLRACE_LOG ??= 'silent';
const { runAdmin } = await import('./admin-command/run.ts');
await runAdmin(process.argv.slice(2));
export {};
