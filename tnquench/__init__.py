"""Judge hydrodynamics of one-dimensional quantum chains against error-controlled exact dynamics."""

# as an attribute the function hides the folder of its name; `from tnquench.judge.page import ...` still works
from tnquench.judge.judgement import judge
from tnquench.notebook import Run, open_run

__all__ = ["Run", "judge", "open_run"]
