"""phaseid: which crystalline phases made these diffraction rings?"""

__version__ = "0.1.0"
