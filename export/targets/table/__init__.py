"""The coefficients alone, for firmware with its own loop: a C header of const data, and the same bytes as Intel HEX."""
