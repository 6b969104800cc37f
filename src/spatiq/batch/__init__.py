"""Many recordings: found, measured on all cores or a cluster, kept in a catalogue, compared."""
