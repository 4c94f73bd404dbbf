"""An invented plant that blends mineral premix for bakeries, and six of its lots."""
