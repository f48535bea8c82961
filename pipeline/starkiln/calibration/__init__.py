"""Learning departures from reference stars."""
