"""Pictures in, tables out: everything that knows a file format."""
