"""Rules as trading rules: what trades on their triggers would have earned against their peers."""

from .evaluate import TradeTable, TriedRule, evaluate_trades, tried_in
from .words import trade_lines, write_trades

__all__ = ["TradeTable", "TriedRule", "evaluate_trades", "trade_lines", "tried_in", "write_trades"]
