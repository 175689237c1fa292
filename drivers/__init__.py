"""What talks to instruments: bytes (link), text (session), volts (generator, scope, switch).

Import from the modules; this file imports nothing so that ``--help`` stays quick.
"""

__all__: list[str] = []
