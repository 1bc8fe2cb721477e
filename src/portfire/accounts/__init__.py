"""Accounts: which source may push the latent state by which route, and the design rows that follow."""

from portfire.accounts._account import ROUTES, SOURCES, Account
from portfire.accounts._design import Column, Design, make_design
from portfire.accounts._kernels import push_kernel

__all__ = ["ROUTES", "SOURCES", "Account", "Column", "Design", "make_design", "push_kernel"]
