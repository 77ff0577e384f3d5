"""Doses: what was given, where it lands, how to give the next one."""
