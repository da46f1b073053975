"""Telling other systems: event bodies, signatures, one bounded POST, when to try again.

`signing` follows the Standard Webhooks specification, `events` CloudEvents 1.0. Nothing
here reads the clock or draws chance: what is sent depends on the arguments alone.
"""
