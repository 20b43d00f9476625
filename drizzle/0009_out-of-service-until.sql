ALTER TABLE "tag_states" ADD COLUMN "out_of_service_until" timestamp with time zone;--> statement-breakpoint
ALTER TABLE "tag_states" ADD COLUMN "out_of_service_by" text;--> statement-breakpoint
ALTER TABLE "tag_states" ADD COLUMN "out_of_service_note" text;