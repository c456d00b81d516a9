"""trialrunner: runs iterative learning control unattended on a real bench rig."""

__version__ = "0.1.0"
