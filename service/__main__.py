"""``python -m service`` is the ``slackwater`` command."""

from service.cli import app

app(prog_name="slackwater")
