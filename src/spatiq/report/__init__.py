"""Pages and figures: what an engineer looks at before reading tables."""
