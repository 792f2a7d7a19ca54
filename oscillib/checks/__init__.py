"""Checks that anyone can run on a field, step, loss, readout or model: None or AssertionError."""

from ._derivative import check_derivatives as check_derivatives
