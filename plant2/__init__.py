"""Position loops around mass-spring-damper plants: from the loop file to proven fixed-point C."""

__version__ = "0.1.0"
