"""The HTTP contract: one file per resource, its routes and its wire models together."""
