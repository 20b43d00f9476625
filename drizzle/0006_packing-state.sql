CREATE TABLE "packed_days" (
	"day" date PRIMARY KEY NOT NULL,
	"readings" bigint NOT NULL,
	"blocks" integer NOT NULL,
	"bytes" bigint NOT NULL,
	"work_ms" bigint NOT NULL,
	"packed_at" timestamp with time zone DEFAULT now() NOT NULL
);
--> statement-breakpoint
CREATE TABLE "packing_state" (
	"id" integer PRIMARY KEY DEFAULT 1 NOT NULL,
	"packed_until" timestamp with time zone DEFAULT '-infinity' NOT NULL,
	"closed_until" timestamp with time zone DEFAULT '-infinity' NOT NULL,
	"done_tag" integer DEFAULT 0 NOT NULL,
	"work_ms" bigint DEFAULT 0 NOT NULL,
	"must_regroup" boolean DEFAULT false NOT NULL,
	"started_at" timestamp with time zone,
	"finished_at" timestamp with time zone,
	"error" text,
	CONSTRAINT "packing_state_is_single" CHECK ("packing_state"."id" = 1)
);
--> statement-breakpoint
CREATE TABLE "retention_rules" (
	"id" integer PRIMARY KEY GENERATED ALWAYS AS IDENTITY (sequence name "retention_rules_id_seq" INCREMENT BY 1 MINVALUE 1 MAXVALUE 2147483647 START WITH 1 CACHE 1),
	"site_id" integer,
	"quantity" text,
	"raw_days" integer NOT NULL,
	"updated_at" timestamp with time zone DEFAULT now() NOT NULL,
	CONSTRAINT "retention_rules_one_each" UNIQUE NULLS NOT DISTINCT("site_id","quantity"),
	CONSTRAINT "retention_rules_say_something" CHECK ("retention_rules"."site_id" IS NOT NULL OR "retention_rules"."quantity" IS NOT NULL),
	CONSTRAINT "retention_rules_days" CHECK ("retention_rules"."raw_days" BETWEEN 3 AND 36500)
);
--> statement-breakpoint
ALTER TABLE "retention_rules" ADD CONSTRAINT "retention_rules_site_id_sites_id_fk" FOREIGN KEY ("site_id") REFERENCES "public"."sites"("id") ON DELETE no action ON UPDATE no action;