# SPDX-License-Identifier: MIT
"""The method held against the user's own scans."""

from scanstrain.proof.batch import prove_batch
from scanstrain.proof.judge import Alarms, Recovered
from scanstrain.proof.pair import Proof, halves, prove_pair

__all__ = ["Alarms", "Proof", "Recovered", "halves", "prove_batch", "prove_pair"]
