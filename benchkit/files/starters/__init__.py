"""Starter files, shipped as package data."""
