"""learnclosure turns ensembles of eddy-rich ocean simulations into verified eddy closures."""

__version__ = "0.1.0"
