"""From a parsed source to drafts of bundles: operands, the schedule, slots, and what is illegal at sight."""
