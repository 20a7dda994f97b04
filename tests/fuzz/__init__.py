"""Random input for a while. TRAPD_FUZZ_S=600 makes it ten minutes instead of half of one, TRAPD_FUZZ_SEED=7 makes it other."""
