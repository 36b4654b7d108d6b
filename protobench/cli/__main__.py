"""``python -m protobench.cli`` is ``protobench``."""

from protobench.cli import main

main()
