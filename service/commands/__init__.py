"""The commands of `bellassay`, one module per group; `service.cli` joins them.

Each module has `add(commands)`, which describes its commands to the parser, and one function per command that takes
the parsed options and returns the exit code. Heavy imports stand inside those functions, so that `--help` is instant.
"""
