"""What trapd is not; said in the help, and in the log of a daemon that drives real instruments."""

CAUTIONS = """\
trapd protects the experiment, not people: RF burns, high voltage and stored charge, lasers and vacuum stay dangerous.
It is no safety device: hardware interlocks come first, and local rules and qualified people decide."""
