"""Alarms: what needs an action by a person, in the words and states of ISA-18.2. Pure."""
