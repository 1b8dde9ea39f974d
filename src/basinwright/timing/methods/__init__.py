"""Methods of time of concentration, one file each; every file here is imported with the room.

A method is one function with the `basinwright.registry.method` decorator, its arguments the columns it needs, and one
case file in the tests. None of them holds where the path is nearly flat: below 0.1 % the classical formulas become
unreliable (M. KC et al., J. Hydrol. Eng., 2014, doi 10.1061/(ASCE)HE.1943-5584.0000830), and for main channels the
guidance for low slopes starts at 0.3 % (Texas Department of Transportation, Hydraulic Design Manual, ch. 4, after
Cleveland et al. 2012). No slope is adjusted here.
"""
