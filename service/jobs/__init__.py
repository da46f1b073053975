"""Durable work: the only room that knows the queue.

A row in the service's own database promises the work; the queue carries it out at least
once. Whatever a crash leaves behind, the sweep finds and mends.
"""
