"""driftwatch: follows the natural frequency and Q of resonances live, with uncertainties."""

__version__ = "0.1.0"
