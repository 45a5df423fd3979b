"""Tests of (conditional) independence in contingency tables, plain and compiled.

Both statistics compare the counts of each stratum, one joint state of the conditioning variables, with
those expected under independence, E = row margin x column margin / stratum size:

    G2 = 2 sum N log(N / E)        (Wilks 1938)
    X2 = sum (N - E)^2 / E         (Pearson 1900)

How sparse tables are read is a convention, and moves results; here, everywhere:

- the degrees of freedom are nominal, (r_x - 1)(r_y - 1) times the product of the *declared* numbers of
  states of the conditioning variables, whatever the rows show;
- cells whose expectation is 0 contribute nothing, so a variable that shows one state only gives the
  statistic 0 and the p-value 1;
- a variable with one declared state has 0 degrees of freedom, and is independent of everything.

The permutation test does without degrees of freedom: it asks how often G2 is as large when, within each
stratum, the states of one variable are dealt out anew among the rows.

- `tables`: one table, plainly; the reference for the rest;
- `critical`: critical values;
- `statistics`: the statistics of a dataset, compiled;
- `permutation`: the permutation test, compiled;
- `evidence`: what learners ask: dependent or not, and how surely. The answers come from tests on data or,
  in place of them, from d-separation in a known DAG.
"""
