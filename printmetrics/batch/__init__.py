"""Many pictures: worker processes, tables, drawings."""
