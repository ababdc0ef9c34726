"""The commands that analyse; the table in driblet.commands.main knows them by name."""
