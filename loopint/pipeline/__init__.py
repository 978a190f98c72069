"""From a config and a table of points to certified tables: the middle floor."""
