"""The C header: one file for C99, C++98 and later, with its own exponential and no library.

`emit` makes the header, `vectors_header` makes the vectors to run on the real board, `runner` compiles and runs.
"""
