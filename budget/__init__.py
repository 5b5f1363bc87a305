"""A live sheet for one DC bus: EMI filters, the converters behind them, and what the layout costs."""

__version__ = "0.1.0"
