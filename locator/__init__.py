"""Find EEG electrode capsules in a T1 scan, label them, and project the EEG into MR space.

Research software, not a medical device.
"""

__version__ = "0.1.0"
