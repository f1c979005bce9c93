"""Leadline: in which brain region and layer did every channel of a silicon probe sit?"""

__version__ = "0.1.0"
