"""Where what is estimated meets how it varies: tables with standard errors, intervals and tests."""
