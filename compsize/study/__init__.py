"""Files to a checked study: the schema, the readers, the checks and the records they fill."""
