"""Files of outlines: the only room that reads a vector file, each by a reader of its own.

No general vector driver opens what a user sent: such drivers follow references to other
files and addresses, run what a database's schema says, and take a file for what it claims
to be. Here a file is told by its first bytes, and is read by code that knows one format,
looks at nothing but the file, and believes no number in it before it is checked.
"""
