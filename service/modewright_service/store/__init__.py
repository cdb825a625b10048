"""Where bases are kept: a memory cache of records, and one computation for each that is missing."""
