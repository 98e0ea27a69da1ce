"""Hands on the words of reports/review.md around its tables."""

WORDS = """\
# Looking again every quarter: what was measured

Made by `python -m tests.calibration --form full --part review --report reports`. Every figure is a
share of simulated worlds, in blocks of 25 (the figures here are of 10 to 16 blocks of each design;
the command makes 16); with 300 worlds a share of .05 has a standard error of .013, one of .75 of
.025. The worlds (`tests/calibration/review_worlds.py`) have quarters of 63 sessions, a horizon of 5
unless said, ten sectors of fifty entities. *Independent*: triggers fall anywhere. *Bursts*: they
come on one day in one sector, four at a time on average. *Sector shocks*: half of all hits are due
to shocks that hit what is open in a sector around a day, four in five of it. *Repeats*: four in ten
triggers are followed by one on the same entity whose window overlaps. The chance of a hit is the
precision exactly in every world.

## Does it keep its promise

### A rule exactly at its promise: proposed for retirement at any time within 20 quarters

Claimed: at most 5 %. "No restarts" is the process since adoption alone. Beside it a plain binomial
test of each quarter at 5 %, which is what a desk that peeks every quarter does.

{level}

### A rule at half its promise: proposed for retirement within 8 quarters

{power}

At 30 triggers a quarter that hang together little, halved precision is seen in time at promises of
.2 and above. At a promise of .05 it is not, and can hardly be by any honest means: 240 triggers
give 12 hits where they should and 6 where the rule has halved, and the most that a test told both
rates in advance could gain on average is a factor of 7. Where triggers come in bursts and share
their hits there are fewer findings than triggers, and what is lost here is what the plain test
pretends to have: there it retires nine good rules in ten at 30 triggers a quarter and a promise of
.2.

## What `keep_share` does

Retired when the evidence against "precision is at least promise x keep_share" reaches 20. A rule
exactly at its promise:

{keep_level}

A rule at half of it, within 8 quarters:

{keep_power}

A promise is itself an estimate. Rules that go on exactly as they always were, 30 triggers a
quarter, independent, promised the precision of a holdout with so many triggers; retired within 20
quarters:

{estimated}

`keep_share = 1` is the only one of the four that holds both claims (at most 5 % at the promise, at
least 75 % within 8 quarters at half of it, promise .2, 30 triggers a quarter), so it is what the
figures recommend where the promise is taken at its word. It takes a rule's luck in its holdout for
decay: with a promise that rests on 40 triggers, use 0.8, with one that rests on 100, 0.9, and
expect to wait longer. Retirement is a proposal in either case.

## Does it still work

Null: each trigger hits with its own expected rate, which moves here from quarter to quarter (0.6
and 1.4 times the mean in turn). A rule no better than expected, said to work at any time within 20
quarters:

{works_level}

A rule twice as good as expected, said to work within 8 quarters:

{works_power}

The rates are the true ones here. In a review they come from the margins null fitted to the same
quarter's events, so they know the totals of that quarter; given those totals, outcomes of different
entities lean against each other. Measured with rates so fitted, in worlds where triggers and events
favour the same busy names and the same restless days of a sector and of the market
(`tests/calibration/fitted_rates.py`; 25 rules a world, which share its events):

{fitted}

## Which triggers hang together

Wrongly retired within 20 quarters / rightly within 8, evidence averaged over triggers of one ...
within a horizon: peer group (`peers`, the default), day (`dates`), entity (`entity`), quarter
(`quarter`).

{hang}

`peers` holds where shocks stay inside a sector and pays little where nothing is shared. It does not
hold where one shock hits every sector (*market shocks*): `dates` does, at the price of most of the
power at low precision. `entity` breaks as soon as sectors share anything. *Regimes by quarter*: the
precision itself swings from quarter to quarter (sd .5 of its logit) around the promise. No
clustering by days holds then; averaging whole quarters does and sees nothing. Such a rule is truly
below its promise for months at a time, and a review will say so.

Windows of neighbouring clusters may overlap. Clusters over two horizons would overlap less; tried
on 150 worlds of each kind, they held the level no better and lost some power. A cluster enters the
evidence at the end of the first quarter by which nothing can join it and all its windows are over,
so none is ever counted in two quarters; a trigger whose window straddles a quarter's start waits
for its cluster.

## Late decay

Precision halves after some quarters; retired within 8 of that (or wrongly before), by how often a
further process starts. Independent triggers, 30 a quarter, clusters by peers.

{late}

The process since adoption forgets slowly: what a good rule earned hides its fall. Two thirds of the
capital go to it and the k-th restart gets 1 / (3 k (k + 1)); every four quarters is the default.

## Confidence sequence for the precision since adoption

Nominal: at most 5 % ever miss within 20 quarters.

{cover}

## New rules in a stream

Share of false discoveries among all, at .05, over 20 quarters with three families of four rules
each; / share of the true rules found. Three in ten families are true (a hit in .3 of triggers
against .1 expected). *Nested*: each rule of a family is about two thirds of the triggers of the one
before, in the same quarter; *kept*: so, but one a quarter on triggers that were used before.

{online}

All three stay far under .05: p-values of few triggers are discrete and lean high. LORD++ is the
default: its levels depend on past discoveries alone, so it needs least from p-values that depend on
each other. SAFFRON and ADDIS also learn from p-values that were not discoveries, find somewhat more
and stand further from what is proved for dependent ones. All hypotheses of one quarter are tested
at levels that do not see each other's p-values.

## Inputs that moved

104 weeks, the change nine weeks before the end, one test a type without adjustment, 999 draws.
Share with p at most .05; in brackets the share dated within two weeks.

{moved}

Not held: where a week is much like the one before (autocorrelation .8 of the factor) false alarms
are more than nominal, since eighty-eight weeks say too little of how much alike; and a yearly wave
is not modelled with two years of weeks. Give three or more years and `season = 52`, or an exposure
that shares the wave (neither was measured).
"""
