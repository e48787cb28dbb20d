"""Binary pages as sets of points: runs, structuring elements, components, morphology."""
