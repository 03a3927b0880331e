"""The version of the numeric core: raised whenever a computed number can move."""

CORE_VERSION = "1.1.0"
RESULT_SCHEMA = 1
