"""A first configuration for tables never seen before: what can be told from them, and questions for the rest."""

from tieline.starting.configuration_text import first_configuration

__all__ = ["first_configuration"]
