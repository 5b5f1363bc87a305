"""Questions put to a project by calculating it many times: how far a cell can go, what two of them do together, and
what tells two projects apart."""
