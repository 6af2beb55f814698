"""One outside thing each: files, bus, database."""
