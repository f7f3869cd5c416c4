"""Published tree equations as data, and their evaluation.

The package knows trees only: diameter, height, wood density and species go in, dry mass per tree comes out together
with the publication, the range of validity and the residual error of the equation used. Plots, areas and files of a
survey are no concern of it.
"""

from __future__ import annotations

__all__: list[str] = []
