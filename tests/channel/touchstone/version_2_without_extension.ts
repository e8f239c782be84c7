[Version] 2.0
# GHZ S RI R 50
[Number of Ports] 2
[Two-Port Data Order] 12_21
[Number of Frequencies] 2
[Network Data]
1 0.1 -0.2 0.5 0.25 0.75 -0.125 -0.3 0.05
2 0.125 0.5 -0.25 0.5 0.5 -0.5 0.25 0
[End]
