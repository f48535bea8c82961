"""The settings of a run: the only place that parses them."""
