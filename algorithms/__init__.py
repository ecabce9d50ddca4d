"""One Processing algorithm per file, its help beside it."""
