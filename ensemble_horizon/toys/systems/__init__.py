"""The toy systems, one module for a family, and the registry that knows them by name.

In reading order: `spiral`, `lorenz`, `channel_basis`, `channel`, `registry`.
"""
