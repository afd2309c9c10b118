"""Redis: keys, scripts, append, compaction, feed and sweep."""
