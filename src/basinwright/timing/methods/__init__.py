"""Methods of time of concentration, one file each; every file here is imported with the room.

A method is one function with the `basinwright.registry.method` decorator, its arguments the columns it needs, and one
case file in the tests. None of them holds where the path is nearly flat: below 0.1 % the classical formulas become
unreliable (KC et al. 2014, J. Hydrol. Eng. 19(5)), and for main channels the guidance for low slopes starts at 0.3 %
(Texas Department of Transportation, Hydraulic Design Manual, ch. 4, after Cleveland et al. 2012).
"""
