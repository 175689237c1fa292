"""The controller: files, plan, sweep, run file, evaluation, picture, commands."""
