"""Makes `small_blocks` importable from every folder of unit tests."""
