CREATE TABLE "alarm_events" (
	"id" bigint PRIMARY KEY GENERATED ALWAYS AS IDENTITY (sequence name "alarm_events_id_seq" INCREMENT BY 1 MINVALUE 1 MAXVALUE 9223372036854775807 START WITH 1 CACHE 1),
	"alarm_id" bigint NOT NULL,
	"at" timestamp with time zone NOT NULL,
	"kind" text NOT NULL,
	"level" text,
	"value" double precision,
	"by" text,
	"note" text
);
--> statement-breakpoint
CREATE TABLE "alarms" (
	"id" bigint PRIMARY KEY GENERATED ALWAYS AS IDENTITY (sequence name "alarms_id_seq" INCREMENT BY 1 MINVALUE 1 MAXVALUE 9223372036854775807 START WITH 1 CACHE 1),
	"site_id" integer NOT NULL,
	"tag_id" integer,
	"source_id" uuid,
	"direction" text NOT NULL,
	"kind" text NOT NULL,
	"level" text NOT NULL,
	"level_now" text,
	"raised_value" double precision,
	"is_uncertain" boolean DEFAULT false NOT NULL,
	"is_late" boolean DEFAULT false NOT NULL,
	"is_test" boolean DEFAULT false NOT NULL,
	"raised_at" timestamp with time zone NOT NULL,
	"escalated_at" timestamp with time zone,
	"cleared_at" timestamp with time zone,
	"acknowledged_at" timestamp with time zone,
	"acknowledged_by" text,
	"acknowledge_note" text,
	"limit_id" integer,
	"suppressed_count" integer DEFAULT 0 NOT NULL,
	"recorded_at" timestamp with time zone DEFAULT now() NOT NULL,
	CONSTRAINT "alarms_cleared_after_raised" CHECK (cleared_at is null or cleared_at >= raised_at),
	CONSTRAINT "alarms_of_tag_or_source" CHECK ((tag_id is null) <> (source_id is null))
);
--> statement-breakpoint
CREATE TABLE "judging_states" (
	"tag_id" integer PRIMARY KEY NOT NULL,
	"state" jsonb NOT NULL,
	"updated_at" timestamp with time zone DEFAULT now() NOT NULL
);
--> statement-breakpoint
CREATE TABLE "tag_states" (
	"tag_id" integer PRIMARY KEY NOT NULL,
	"shelved_until" timestamp with time zone,
	"shelved_by" text,
	"shelved_note" text,
	"out_of_service" boolean DEFAULT false NOT NULL,
	"suppressed_by" uuid
);
--> statement-breakpoint
CREATE TABLE "test_values" (
	"id" integer PRIMARY KEY GENERATED ALWAYS AS IDENTITY (sequence name "test_values_id_seq" INCREMENT BY 1 MINVALUE 1 MAXVALUE 2147483647 START WITH 1 CACHE 1),
	"site_id" integer NOT NULL,
	"tag_id" integer NOT NULL,
	"value" double precision NOT NULL,
	"set_at" timestamp with time zone DEFAULT now() NOT NULL,
	"set_by" text NOT NULL,
	"until" timestamp with time zone NOT NULL,
	"ended_at" timestamp with time zone
);
--> statement-breakpoint
CREATE TABLE "audit_entries" (
	"id" bigint PRIMARY KEY GENERATED ALWAYS AS IDENTITY (sequence name "audit_entries_id_seq" INCREMENT BY 1 MINVALUE 1 MAXVALUE 9223372036854775807 START WITH 1 CACHE 1),
	"at" timestamp with time zone DEFAULT now() NOT NULL,
	"site_id" integer,
	"actor_kind" text NOT NULL,
	"actor_id" text,
	"actor_name" text NOT NULL,
	"ip" text,
	"action" text NOT NULL,
	"subject_kind" text NOT NULL,
	"subject_id" text,
	"subject_name" text,
	"before" jsonb,
	"after" jsonb,
	"note" text
);
--> statement-breakpoint
CREATE TABLE "outbox" (
	"id" bigint PRIMARY KEY GENERATED ALWAYS AS IDENTITY (sequence name "outbox_id_seq" INCREMENT BY 1 MINVALUE 1 MAXVALUE 9223372036854775807 START WITH 1 CACHE 1),
	"channel" text NOT NULL,
	"target" text NOT NULL,
	"payload" jsonb NOT NULL,
	"state" text DEFAULT 'waiting' NOT NULL,
	"attempts" integer DEFAULT 0 NOT NULL,
	"next_at" timestamp with time zone DEFAULT now() NOT NULL,
	"created_at" timestamp with time zone DEFAULT now() NOT NULL,
	"sent_at" timestamp with time zone,
	"last_error" text
);
--> statement-breakpoint
CREATE TABLE "feed_heads" (
	"site_id" integer PRIMARY KEY NOT NULL,
	"position" bigint DEFAULT 0 NOT NULL,
	"oldest" bigint DEFAULT 0 NOT NULL
);
--> statement-breakpoint
CREATE TABLE "feed_readers" (
	"reader" text PRIMARY KEY NOT NULL,
	"site_id" integer NOT NULL,
	"name" text NOT NULL,
	"position" bigint NOT NULL,
	"read_at" timestamp with time zone NOT NULL
);
--> statement-breakpoint
CREATE TABLE "latest" (
	"tag_id" integer PRIMARY KEY NOT NULL,
	"at" timestamp with time zone NOT NULL,
	"value" double precision,
	"quality" integer NOT NULL,
	"received_at" timestamp with time zone NOT NULL,
	"confirmed_at" timestamp with time zone NOT NULL,
	"is_hub_time" boolean NOT NULL,
	"source_at" timestamp with time zone,
	"reason" text,
	"raw" text,
	"wire" text,
	"verdict" text DEFAULT 'normal' NOT NULL,
	"is_stale" boolean DEFAULT false NOT NULL,
	"revision" integer NOT NULL,
	"updated_at" timestamp with time zone DEFAULT now() NOT NULL
);
--> statement-breakpoint
CREATE TABLE "areas" (
	"id" integer PRIMARY KEY GENERATED ALWAYS AS IDENTITY (sequence name "areas_id_seq" INCREMENT BY 1 MINVALUE 1 MAXVALUE 2147483647 START WITH 1 CACHE 1),
	"site_id" integer NOT NULL,
	"name" text NOT NULL
);
--> statement-breakpoint
CREATE TABLE "dead_letters" (
	"id" bigint PRIMARY KEY GENERATED ALWAYS AS IDENTITY (sequence name "dead_letters_id_seq" INCREMENT BY 1 MINVALUE 1 MAXVALUE 9223372036854775807 START WITH 1 CACHE 1),
	"at" timestamp with time zone DEFAULT now() NOT NULL,
	"site_id" integer,
	"tag_id" integer,
	"reason" text NOT NULL,
	"row" jsonb NOT NULL,
	"resolved_at" timestamp with time zone
);
--> statement-breakpoint
CREATE TABLE "installation" (
	"id" integer PRIMARY KEY DEFAULT 1 NOT NULL,
	"uid" uuid DEFAULT gen_random_uuid() NOT NULL,
	"epoch" uuid DEFAULT gen_random_uuid() NOT NULL,
	"is_demo" boolean DEFAULT false NOT NULL,
	"created_at" timestamp with time zone DEFAULT now() NOT NULL,
	CONSTRAINT "installation_is_single" CHECK ("installation"."id" = 1)
);
--> statement-breakpoint
CREATE TABLE "machines" (
	"id" integer PRIMARY KEY GENERATED ALWAYS AS IDENTITY (sequence name "machines_id_seq" INCREMENT BY 1 MINVALUE 1 MAXVALUE 2147483647 START WITH 1 CACHE 1),
	"site_id" integer NOT NULL,
	"area_id" integer,
	"name" text NOT NULL,
	"description" text,
	"data" jsonb DEFAULT '{}'::jsonb NOT NULL,
	"version" integer DEFAULT 1 NOT NULL,
	"deleted_at" timestamp with time zone
);
--> statement-breakpoint
CREATE TABLE "measuring_points" (
	"id" integer PRIMARY KEY GENERATED ALWAYS AS IDENTITY (sequence name "measuring_points_id_seq" INCREMENT BY 1 MINVALUE 1 MAXVALUE 2147483647 START WITH 1 CACHE 1),
	"machine_id" integer NOT NULL,
	"name" text NOT NULL,
	"description" text,
	"data" jsonb DEFAULT '{}'::jsonb NOT NULL
);
--> statement-breakpoint
CREATE TABLE "sensors" (
	"id" integer PRIMARY KEY GENERATED ALWAYS AS IDENTITY (sequence name "sensors_id_seq" INCREMENT BY 1 MINVALUE 1 MAXVALUE 2147483647 START WITH 1 CACHE 1),
	"site_id" integer NOT NULL,
	"point_id" integer,
	"serial" text NOT NULL,
	"kind" text NOT NULL,
	"mounting" text,
	"orientation" jsonb DEFAULT '{}'::jsonb NOT NULL,
	"battery_installed_on" text,
	"installed_at" timestamp with time zone DEFAULT now() NOT NULL,
	"removed_at" timestamp with time zone
);
--> statement-breakpoint
CREATE TABLE "settings" (
	"key" text PRIMARY KEY NOT NULL,
	"value" jsonb NOT NULL,
	"updated_at" timestamp with time zone DEFAULT now() NOT NULL
);
--> statement-breakpoint
CREATE TABLE "sites" (
	"id" integer PRIMARY KEY GENERATED ALWAYS AS IDENTITY (sequence name "sites_id_seq" INCREMENT BY 1 MINVALUE 1 MAXVALUE 2147483647 START WITH 1 CACHE 1),
	"slug" text NOT NULL,
	"name" text NOT NULL,
	"time_zone" text DEFAULT 'UTC' NOT NULL,
	"created_at" timestamp with time zone DEFAULT now() NOT NULL,
	CONSTRAINT "sites_slug_form" CHECK ("sites"."slug" ~ '^[a-z0-9-]{1,60}$')
);
--> statement-breakpoint
CREATE TABLE "certificates" (
	"fingerprint" text PRIMARY KEY NOT NULL,
	"source_id" uuid,
	"subject" text NOT NULL,
	"issuer" text NOT NULL,
	"valid_from" timestamp with time zone,
	"valid_to" timestamp with time zone,
	"der" "bytea" NOT NULL,
	"state" text DEFAULT 'unknown' NOT NULL,
	"first_seen_at" timestamp with time zone DEFAULT now() NOT NULL,
	"decided_at" timestamp with time zone,
	"decided_by" text
);
--> statement-breakpoint
CREATE TABLE "collectors" (
	"id" uuid PRIMARY KEY NOT NULL,
	"instance" text NOT NULL,
	"host" text NOT NULL,
	"pid" integer NOT NULL,
	"started_at" timestamp with time zone DEFAULT now() NOT NULL,
	"heartbeat_at" timestamp with time zone DEFAULT now() NOT NULL,
	"stats" jsonb DEFAULT '{}'::jsonb NOT NULL
);
--> statement-breakpoint
CREATE TABLE "source_events" (
	"id" bigint PRIMARY KEY GENERATED ALWAYS AS IDENTITY (sequence name "source_events_id_seq" INCREMENT BY 1 MINVALUE 1 MAXVALUE 9223372036854775807 START WITH 1 CACHE 1),
	"source_id" uuid NOT NULL,
	"at" timestamp with time zone DEFAULT now() NOT NULL,
	"level" text NOT NULL,
	"code" text NOT NULL,
	"text" text NOT NULL
);
--> statement-breakpoint
CREATE TABLE "source_exchanges" (
	"id" bigint PRIMARY KEY GENERATED ALWAYS AS IDENTITY (sequence name "source_exchanges_id_seq" INCREMENT BY 1 MINVALUE 1 MAXVALUE 9223372036854775807 START WITH 1 CACHE 1),
	"source_id" uuid NOT NULL,
	"at" timestamp with time zone NOT NULL,
	"direction" text NOT NULL,
	"bytes" text NOT NULL,
	"meaning" text NOT NULL,
	"failed" boolean NOT NULL
);
--> statement-breakpoint
CREATE TABLE "source_health" (
	"source_id" uuid PRIMARY KEY NOT NULL,
	"state" text NOT NULL,
	"since" timestamp with time zone DEFAULT now() NOT NULL,
	"advice" jsonb,
	"last_good_at" timestamp with time zone,
	"subscribed_at" timestamp with time zone,
	"good" bigint DEFAULT 0 NOT NULL,
	"bad" bigint DEFAULT 0 NOT NULL,
	"duplicates" bigint DEFAULT 0 NOT NULL,
	"dropped" bigint DEFAULT 0 NOT NULL,
	"requests" bigint DEFAULT 0 NOT NULL,
	"failures" bigint DEFAULT 0 NOT NULL,
	"reconnects" bigint DEFAULT 0 NOT NULL,
	"tags" integer DEFAULT 0 NOT NULL,
	"stale_tags" integer DEFAULT 0 NOT NULL,
	"latency_p50_ms" double precision,
	"latency_p95_ms" double precision,
	"clock_skew_ms" double precision,
	"updated_at" timestamp with time zone DEFAULT now() NOT NULL
);
--> statement-breakpoint
CREATE TABLE "source_leases" (
	"source_id" uuid PRIMARY KEY NOT NULL,
	"owner" uuid,
	"instance" text,
	"token" bigint DEFAULT 0 NOT NULL,
	"until" timestamp with time zone NOT NULL
);
--> statement-breakpoint
CREATE TABLE "source_minutes" (
	"source_id" uuid NOT NULL,
	"minute" timestamp with time zone NOT NULL,
	"good" integer NOT NULL,
	"bad" integer NOT NULL,
	"requests" integer NOT NULL,
	"failures" integer NOT NULL,
	"reconnects" integer NOT NULL,
	"latency_p50_ms" double precision,
	"latency_p95_ms" double precision
);
--> statement-breakpoint
CREATE TABLE "source_requests" (
	"id" uuid PRIMARY KEY DEFAULT gen_random_uuid() NOT NULL,
	"source_id" uuid NOT NULL,
	"kind" text NOT NULL,
	"params" jsonb DEFAULT '{}'::jsonb NOT NULL,
	"requested_at" timestamp with time zone DEFAULT now() NOT NULL,
	"answered_at" timestamp with time zone,
	"answer" jsonb
);
--> statement-breakpoint
CREATE TABLE "sources" (
	"id" uuid PRIMARY KEY DEFAULT gen_random_uuid() NOT NULL,
	"site_id" integer NOT NULL,
	"name" text NOT NULL,
	"kind" text NOT NULL,
	"enabled" boolean DEFAULT true NOT NULL,
	"settings" jsonb NOT NULL,
	"secrets" jsonb DEFAULT '{}'::jsonb NOT NULL,
	"contact" text,
	"notes" text,
	"version" integer DEFAULT 1 NOT NULL,
	"created_at" timestamp with time zone DEFAULT now() NOT NULL,
	"updated_at" timestamp with time zone DEFAULT now() NOT NULL,
	"deleted_at" timestamp with time zone
);
--> statement-breakpoint
CREATE TABLE "draft_rows" (
	"site_id" integer NOT NULL,
	"tag_id" integer NOT NULL,
	"row" jsonb,
	"position" integer DEFAULT 0 NOT NULL,
	"row_version" integer DEFAULT 1 NOT NULL,
	"updated_at" timestamp with time zone DEFAULT now() NOT NULL,
	"updated_by" text,
	CONSTRAINT "draft_rows_site_id_tag_id_pk" PRIMARY KEY("site_id","tag_id")
);
--> statement-breakpoint
CREATE TABLE "limit_revisions" (
	"site_id" integer NOT NULL,
	"revision" integer NOT NULL,
	"saved_at" timestamp with time zone DEFAULT now() NOT NULL,
	"saved_by" text NOT NULL,
	"note" text DEFAULT '' NOT NULL,
	CONSTRAINT "limit_revisions_site_id_revision_pk" PRIMARY KEY("site_id","revision")
);
--> statement-breakpoint
CREATE TABLE "limits" (
	"id" integer PRIMARY KEY GENERATED ALWAYS AS IDENTITY (sequence name "limits_id_seq" INCREMENT BY 1 MINVALUE 1 MAXVALUE 2147483647 START WITH 1 CACHE 1),
	"site_id" integer NOT NULL,
	"tag_id" integer NOT NULL,
	"kind" text NOT NULL,
	"level" text NOT NULL,
	"value" double precision,
	"deadband" double precision DEFAULT 0 NOT NULL,
	"raise_after_s" double precision DEFAULT 0 NOT NULL,
	"clear_after_s" double precision DEFAULT 0 NOT NULL,
	"window_s" double precision,
	"baseline" jsonb,
	"state" double precision,
	"origin" text DEFAULT 'site' NOT NULL,
	"note" text,
	"cause" text,
	"consequence" text,
	"response" text,
	"respond_within_s" double precision,
	"from_revision" integer NOT NULL,
	"to_revision" integer
);
--> statement-breakpoint
CREATE TABLE "map_drafts" (
	"site_id" integer PRIMARY KEY NOT NULL,
	"version" integer DEFAULT 1 NOT NULL,
	"base_revision" integer DEFAULT 0 NOT NULL,
	"convert" boolean DEFAULT false NOT NULL,
	"updated_at" timestamp with time zone DEFAULT now() NOT NULL,
	"updated_by" text
);
--> statement-breakpoint
CREATE TABLE "map_revisions" (
	"site_id" integer NOT NULL,
	"revision" integer NOT NULL,
	"published_at" timestamp with time zone DEFAULT now() NOT NULL,
	"published_by" text NOT NULL,
	"note" text DEFAULT '' NOT NULL,
	"started" integer NOT NULL,
	"stopped" integer NOT NULL,
	"changed" integer NOT NULL,
	"restored_from" integer,
	CONSTRAINT "map_revisions_site_id_revision_pk" PRIMARY KEY("site_id","revision")
);
--> statement-breakpoint
CREATE TABLE "map_rows" (
	"site_id" integer NOT NULL,
	"tag_id" integer NOT NULL,
	"from_revision" integer NOT NULL,
	"to_revision" integer,
	"row" jsonb NOT NULL,
	CONSTRAINT "map_rows_site_id_tag_id_from_revision_pk" PRIMARY KEY("site_id","tag_id","from_revision")
);
--> statement-breakpoint
CREATE TABLE "tags" (
	"id" integer PRIMARY KEY GENERATED ALWAYS AS IDENTITY (sequence name "tags_id_seq" INCREMENT BY 1 MINVALUE 1 MAXVALUE 2147483647 START WITH 1 CACHE 1),
	"site_id" integer NOT NULL,
	"name" text NOT NULL,
	"unit" text DEFAULT '1' NOT NULL,
	"detector" text DEFAULT 'none' NOT NULL,
	"quantity" text,
	"source_id" uuid,
	"machine_id" integer,
	"point_id" integer,
	"row" jsonb,
	"revision" integer DEFAULT 0 NOT NULL,
	"published_at" timestamp with time zone,
	"retired_at" timestamp with time zone
);
--> statement-breakpoint
CREATE TABLE "api_key_sites" (
	"key_id" uuid NOT NULL,
	"site_id" integer NOT NULL,
	CONSTRAINT "api_key_sites_key_id_site_id_pk" PRIMARY KEY("key_id","site_id")
);
--> statement-breakpoint
CREATE TABLE "api_keys" (
	"id" uuid PRIMARY KEY DEFAULT gen_random_uuid() NOT NULL,
	"name" text NOT NULL,
	"key_hash" text NOT NULL,
	"prefix" text NOT NULL,
	"scopes" text[] NOT NULL,
	"expires_at" timestamp with time zone,
	"revoked_at" timestamp with time zone,
	"last_used_at" timestamp with time zone,
	"last_used_ip" text,
	"created_by" text,
	"created_at" timestamp with time zone DEFAULT now() NOT NULL
);
--> statement-breakpoint
CREATE TABLE "one_time_tokens" (
	"id" text PRIMARY KEY NOT NULL,
	"kind" text NOT NULL,
	"user_id" text NOT NULL,
	"expires_at" timestamp with time zone NOT NULL,
	"used_at" timestamp with time zone,
	"created_at" timestamp with time zone DEFAULT now() NOT NULL
);
--> statement-breakpoint
CREATE TABLE "sessions" (
	"id" text PRIMARY KEY NOT NULL,
	"user_id" text NOT NULL,
	"expires_at" timestamp with time zone NOT NULL,
	"created_at" timestamp with time zone DEFAULT now() NOT NULL,
	"ip" text,
	"user_agent" text
);
--> statement-breakpoint
CREATE TABLE "site_roles" (
	"user_id" text NOT NULL,
	"site_id" integer NOT NULL,
	"role" text NOT NULL,
	CONSTRAINT "site_roles_user_id_site_id_pk" PRIMARY KEY("user_id","site_id")
);
--> statement-breakpoint
CREATE TABLE "users" (
	"id" text PRIMARY KEY NOT NULL,
	"email" text NOT NULL,
	"name" text NOT NULL,
	"password_hash" text,
	"is_admin" boolean DEFAULT false NOT NULL,
	"disabled_at" timestamp with time zone,
	"created_at" timestamp with time zone DEFAULT now() NOT NULL,
	"preferences" text DEFAULT '{}' NOT NULL
);
--> statement-breakpoint
ALTER TABLE "alarm_events" ADD CONSTRAINT "alarm_events_alarm_id_alarms_id_fk" FOREIGN KEY ("alarm_id") REFERENCES "public"."alarms"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "alarms" ADD CONSTRAINT "alarms_site_id_sites_id_fk" FOREIGN KEY ("site_id") REFERENCES "public"."sites"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "alarms" ADD CONSTRAINT "alarms_tag_id_tags_id_fk" FOREIGN KEY ("tag_id") REFERENCES "public"."tags"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "alarms" ADD CONSTRAINT "alarms_source_id_sources_id_fk" FOREIGN KEY ("source_id") REFERENCES "public"."sources"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "alarms" ADD CONSTRAINT "alarms_limit_id_limits_id_fk" FOREIGN KEY ("limit_id") REFERENCES "public"."limits"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "judging_states" ADD CONSTRAINT "judging_states_tag_id_tags_id_fk" FOREIGN KEY ("tag_id") REFERENCES "public"."tags"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "tag_states" ADD CONSTRAINT "tag_states_tag_id_tags_id_fk" FOREIGN KEY ("tag_id") REFERENCES "public"."tags"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "test_values" ADD CONSTRAINT "test_values_site_id_sites_id_fk" FOREIGN KEY ("site_id") REFERENCES "public"."sites"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "test_values" ADD CONSTRAINT "test_values_tag_id_tags_id_fk" FOREIGN KEY ("tag_id") REFERENCES "public"."tags"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "feed_heads" ADD CONSTRAINT "feed_heads_site_id_sites_id_fk" FOREIGN KEY ("site_id") REFERENCES "public"."sites"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "feed_readers" ADD CONSTRAINT "feed_readers_site_id_sites_id_fk" FOREIGN KEY ("site_id") REFERENCES "public"."sites"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "latest" ADD CONSTRAINT "latest_tag_id_tags_id_fk" FOREIGN KEY ("tag_id") REFERENCES "public"."tags"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "areas" ADD CONSTRAINT "areas_site_id_sites_id_fk" FOREIGN KEY ("site_id") REFERENCES "public"."sites"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "machines" ADD CONSTRAINT "machines_site_id_sites_id_fk" FOREIGN KEY ("site_id") REFERENCES "public"."sites"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "machines" ADD CONSTRAINT "machines_area_id_areas_id_fk" FOREIGN KEY ("area_id") REFERENCES "public"."areas"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "measuring_points" ADD CONSTRAINT "measuring_points_machine_id_machines_id_fk" FOREIGN KEY ("machine_id") REFERENCES "public"."machines"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "sensors" ADD CONSTRAINT "sensors_site_id_sites_id_fk" FOREIGN KEY ("site_id") REFERENCES "public"."sites"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "sensors" ADD CONSTRAINT "sensors_point_id_measuring_points_id_fk" FOREIGN KEY ("point_id") REFERENCES "public"."measuring_points"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "certificates" ADD CONSTRAINT "certificates_source_id_sources_id_fk" FOREIGN KEY ("source_id") REFERENCES "public"."sources"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "source_events" ADD CONSTRAINT "source_events_source_id_sources_id_fk" FOREIGN KEY ("source_id") REFERENCES "public"."sources"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "source_exchanges" ADD CONSTRAINT "source_exchanges_source_id_sources_id_fk" FOREIGN KEY ("source_id") REFERENCES "public"."sources"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "source_health" ADD CONSTRAINT "source_health_source_id_sources_id_fk" FOREIGN KEY ("source_id") REFERENCES "public"."sources"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "source_leases" ADD CONSTRAINT "source_leases_source_id_sources_id_fk" FOREIGN KEY ("source_id") REFERENCES "public"."sources"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "source_requests" ADD CONSTRAINT "source_requests_source_id_sources_id_fk" FOREIGN KEY ("source_id") REFERENCES "public"."sources"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "sources" ADD CONSTRAINT "sources_site_id_sites_id_fk" FOREIGN KEY ("site_id") REFERENCES "public"."sites"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "draft_rows" ADD CONSTRAINT "draft_rows_site_id_sites_id_fk" FOREIGN KEY ("site_id") REFERENCES "public"."sites"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "draft_rows" ADD CONSTRAINT "draft_rows_tag_id_tags_id_fk" FOREIGN KEY ("tag_id") REFERENCES "public"."tags"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "limit_revisions" ADD CONSTRAINT "limit_revisions_site_id_sites_id_fk" FOREIGN KEY ("site_id") REFERENCES "public"."sites"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "limits" ADD CONSTRAINT "limits_site_id_sites_id_fk" FOREIGN KEY ("site_id") REFERENCES "public"."sites"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "limits" ADD CONSTRAINT "limits_tag_id_tags_id_fk" FOREIGN KEY ("tag_id") REFERENCES "public"."tags"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "map_drafts" ADD CONSTRAINT "map_drafts_site_id_sites_id_fk" FOREIGN KEY ("site_id") REFERENCES "public"."sites"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "map_revisions" ADD CONSTRAINT "map_revisions_site_id_sites_id_fk" FOREIGN KEY ("site_id") REFERENCES "public"."sites"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "map_rows" ADD CONSTRAINT "map_rows_site_id_sites_id_fk" FOREIGN KEY ("site_id") REFERENCES "public"."sites"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "map_rows" ADD CONSTRAINT "map_rows_tag_id_tags_id_fk" FOREIGN KEY ("tag_id") REFERENCES "public"."tags"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "tags" ADD CONSTRAINT "tags_site_id_sites_id_fk" FOREIGN KEY ("site_id") REFERENCES "public"."sites"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "tags" ADD CONSTRAINT "tags_source_id_sources_id_fk" FOREIGN KEY ("source_id") REFERENCES "public"."sources"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "tags" ADD CONSTRAINT "tags_machine_id_machines_id_fk" FOREIGN KEY ("machine_id") REFERENCES "public"."machines"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "tags" ADD CONSTRAINT "tags_point_id_measuring_points_id_fk" FOREIGN KEY ("point_id") REFERENCES "public"."measuring_points"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "api_key_sites" ADD CONSTRAINT "api_key_sites_key_id_api_keys_id_fk" FOREIGN KEY ("key_id") REFERENCES "public"."api_keys"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "api_key_sites" ADD CONSTRAINT "api_key_sites_site_id_sites_id_fk" FOREIGN KEY ("site_id") REFERENCES "public"."sites"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "one_time_tokens" ADD CONSTRAINT "one_time_tokens_user_id_users_id_fk" FOREIGN KEY ("user_id") REFERENCES "public"."users"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "sessions" ADD CONSTRAINT "sessions_user_id_users_id_fk" FOREIGN KEY ("user_id") REFERENCES "public"."users"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "site_roles" ADD CONSTRAINT "site_roles_user_id_users_id_fk" FOREIGN KEY ("user_id") REFERENCES "public"."users"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
ALTER TABLE "site_roles" ADD CONSTRAINT "site_roles_site_id_sites_id_fk" FOREIGN KEY ("site_id") REFERENCES "public"."sites"("id") ON DELETE no action ON UPDATE no action;--> statement-breakpoint
CREATE INDEX "alarm_events_by_alarm" ON "alarm_events" USING btree ("alarm_id");--> statement-breakpoint
CREATE UNIQUE INDEX "alarms_one_open_per_tag_and_direction" ON "alarms" USING btree ("tag_id","direction","is_test") WHERE cleared_at is null and tag_id is not null;--> statement-breakpoint
CREATE UNIQUE INDEX "alarms_one_open_per_source" ON "alarms" USING btree ("source_id") WHERE cleared_at is null and source_id is not null;--> statement-breakpoint
CREATE UNIQUE INDEX "alarms_same_excursion_once" ON "alarms" USING btree ("tag_id","direction","is_test","raised_at") WHERE tag_id is not null;--> statement-breakpoint
CREATE INDEX "alarms_by_site_and_time" ON "alarms" USING btree ("site_id","raised_at" DESC NULLS LAST,"id" DESC NULLS LAST);--> statement-breakpoint
CREATE INDEX "alarms_by_tag_and_time" ON "alarms" USING btree ("tag_id","raised_at" DESC NULLS LAST);--> statement-breakpoint
CREATE INDEX "test_values_by_tag" ON "test_values" USING btree ("tag_id","until" DESC NULLS LAST);--> statement-breakpoint
CREATE INDEX "audit_by_site_and_time" ON "audit_entries" USING btree ("site_id","id" DESC NULLS LAST);--> statement-breakpoint
CREATE INDEX "outbox_waiting" ON "outbox" USING btree ("next_at");--> statement-breakpoint
CREATE UNIQUE INDEX "areas_one_name_per_site" ON "areas" USING btree ("site_id",lower("name"));--> statement-breakpoint
CREATE UNIQUE INDEX "machines_one_name_per_site" ON "machines" USING btree ("site_id",lower("name")) WHERE deleted_at is null;--> statement-breakpoint
CREATE UNIQUE INDEX "points_one_name_per_machine" ON "measuring_points" USING btree ("machine_id",lower("name"));--> statement-breakpoint
CREATE UNIQUE INDEX "sites_by_slug" ON "sites" USING btree ("slug");--> statement-breakpoint
CREATE INDEX "source_events_by_source" ON "source_events" USING btree ("source_id","id" DESC NULLS LAST);--> statement-breakpoint
CREATE INDEX "source_exchanges_by_source" ON "source_exchanges" USING btree ("source_id","id" DESC NULLS LAST);--> statement-breakpoint
CREATE UNIQUE INDEX "source_minutes_key" ON "source_minutes" USING btree ("source_id","minute");--> statement-breakpoint
CREATE INDEX "source_requests_open" ON "source_requests" USING btree ("source_id") WHERE answered_at is null;--> statement-breakpoint
CREATE UNIQUE INDEX "sources_one_name_per_site" ON "sources" USING btree ("site_id",lower("name")) WHERE deleted_at is null;--> statement-breakpoint
CREATE INDEX "limits_current" ON "limits" USING btree ("tag_id") WHERE to_revision is null;--> statement-breakpoint
CREATE INDEX "limits_by_site" ON "limits" USING btree ("site_id");--> statement-breakpoint
CREATE INDEX "map_rows_current" ON "map_rows" USING btree ("site_id") WHERE to_revision is null;--> statement-breakpoint
CREATE UNIQUE INDEX "tags_one_live_name_per_site" ON "tags" USING btree ("site_id",lower("name")) WHERE published_at is not null and retired_at is null;--> statement-breakpoint
CREATE INDEX "tags_by_site" ON "tags" USING btree ("site_id","id");--> statement-breakpoint
CREATE INDEX "tags_by_source" ON "tags" USING btree ("source_id");--> statement-breakpoint
CREATE UNIQUE INDEX "api_keys_by_hash" ON "api_keys" USING btree ("key_hash");--> statement-breakpoint
CREATE UNIQUE INDEX "api_keys_one_live_name" ON "api_keys" USING btree (lower("name")) WHERE revoked_at is null;--> statement-breakpoint
CREATE UNIQUE INDEX "users_one_per_email" ON "users" USING btree (lower("email"));