"""How the registry is used from a shell: a module a noun, a skin over what Python calls.

Every command parses, makes one call and hands back an ``Answer``; ``main`` prints it.
Importing these modules costs no more than typer: a command imports what it needs when it
runs, so that help and completion stay quick.
"""
