"""The door of the demo: writes an invented scenario with planted structure, and says how near it was found."""

from bigsvd.demo.compare import Agreement, compare_with_planted
from bigsvd.demo.scenario import INVENTED
from bigsvd.demo.write import DemoFile, write_demo

__all__ = ["INVENTED", "Agreement", "DemoFile", "compare_with_planted", "write_demo"]
