"""From a YAML test plan to L(I,T) and Isat(T) of an inductor. Each folder here is one room; see DEVELOPERS.md."""
