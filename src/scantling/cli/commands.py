"""The commands, each in a module of its own: parse, call one function, render, give a status."""

from scantling.cli import budget, diagnose, draft, laws, replay, resume, stress, vet
from scantling.cli.group import STATUS, commands

__all__ = [
    "STATUS", "budget", "commands", "diagnose", "draft", "laws", "replay", "resume", "stress",
    "vet",
]  # fmt: skip
