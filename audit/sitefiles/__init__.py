"""A site's text files -> cells and settings with their lines, every fault noted.

``text`` reads a file's text, ``table`` the rows of a CSV, ``settings`` the keys of a TOML file,
``sources`` its export tables, ``localtime`` zones and local times. ``config`` and ``register`` are
made from them.
"""
