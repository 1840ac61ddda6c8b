"""python -m rigtally.cli"""

from rigtally.cli.main import main

main()
