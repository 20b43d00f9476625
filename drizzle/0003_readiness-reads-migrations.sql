-- The web process says whether the schema is at its version, so the application's role may look at the migrations done.
GRANT USAGE ON SCHEMA drizzle TO millrace_app;
--> statement-breakpoint
GRANT SELECT ON drizzle.__drizzle_migrations TO millrace_app;
