"""The guard: pure judgement, no I/O."""
