"""``python -m sensorgrade`` is the command line."""

from sensorgrade.cli.main import main

main()
