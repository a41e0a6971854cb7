"""Judge hydrodynamics of one-dimensional quantum chains against error-controlled exact dynamics."""

from tnquench.notebook import Run, open_run

__all__ = ["Run", "open_run"]
