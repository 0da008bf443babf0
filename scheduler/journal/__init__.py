"""An append-only store of what was planned: inputs, settings, versions, certificates, outputs.

Each entry is chained to the one before by hash (`chain`); contents are stored once, by their own
hash (`store`). `verify` finds what was changed; `reproduce` plans again and compares.
"""
