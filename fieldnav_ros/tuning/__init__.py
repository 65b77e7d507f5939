"""The tuner without ROS: space, cost, search, verdict, session and its ledger."""
