"""The guarded HTTP client: every request that the service sends out goes through here.

`addresses` says which addresses are off limits, `targets` reads a URL and resolves its
name once, `wire` connects to what was vetted within one deadline, `client` sends.
"""
