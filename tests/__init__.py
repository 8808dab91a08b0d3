"""Tests of the project; a package so that they find each other and `core` wherever they are started."""
