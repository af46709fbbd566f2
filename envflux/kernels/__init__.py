"""Compiled numerics: serial, cached, without the GIL; callers put threads above them."""
