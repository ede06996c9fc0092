"""The Python module: CPython 3.8 and later, and MicroPython; no imports but `math` and `struct`."""
