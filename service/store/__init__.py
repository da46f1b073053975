"""Tables, queries and writes by noun.

Functions take an open session and never commit: who opens a session decides what belongs
together.
"""
