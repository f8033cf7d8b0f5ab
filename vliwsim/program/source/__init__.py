"""The source language: lines to a tree, expressions, the header; nothing here knows bundles or slots."""
