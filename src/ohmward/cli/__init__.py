"""The commands: each parses what was typed, calls one function and maps an error to an exit code.

Nothing heavy is imported before a command needs it, so that ``--help`` is there at once.
"""
