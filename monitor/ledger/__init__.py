"""The record: an append-only chain of entries, an archive of files by content, and tables derived from the chain."""
