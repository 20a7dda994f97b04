"""Instrument drivers: the interfaces, the registry, the link, the conformance kit and the SCPI family.

This package never imports trapd; a laboratory's own driver package looks the same and lives outside.
"""
