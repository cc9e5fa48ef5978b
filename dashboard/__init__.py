"""The live page: reads `live.json` and the archives of a lab, and moves nothing."""
