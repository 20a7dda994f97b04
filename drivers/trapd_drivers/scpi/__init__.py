"""The SCPI family: instruments that speak SCPI-1999 over IEEE 488.2 in the dialect of a profile."""
