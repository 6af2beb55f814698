"""Named causes: what could explain readings that the quiet filter did not expect."""
