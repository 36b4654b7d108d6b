"""The conformance cases, the pytest plugin that collects and judges them, and the raw tester they use."""
