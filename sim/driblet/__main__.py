"""`python -m driblet`."""

from driblet.commands.main import script

script()
