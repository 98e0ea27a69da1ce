"""Hands on the report's words; every figure comes from the result lines, in its tables."""

PROSE = {
    "head": """# Calibration: can the answers be believed?

Worlds are drawn from a seed in which the truth is known: what drives alerts and events alike, and
which combinations, if any, say something beyond it. The tool is run on them as it is. Worlds in
*italics* hold something that the margins null does not claim to remove. Every ± is a standard
error over seeds (combinations of one world depend on each other, so a seed counts once).

Worlds have 200 entities, 400 sessions, 10 alert types of 1,500 alerts, look-back and horizon of 5
sessions, base rate 5 % and combinations of up to three types with 20 triggers or more, unless the
table says otherwise.""",
    "short": """## In short

{table}

**Where not to believe it.** Three things make alerts and events move together without being held
fixed, and then the gate, the holdout and the placebo are wrong together:

- *Groups that the tool does not know.* Sector shocks without a sector column look like signal.
  Give a `peers` column.
- *Busy weeks of a single name* that drive both its alerts and its events. No null here removes
  them; sections 4 and 5 show what narrows it and what warns of it.
- *Alerts that follow events, where events come in bursts.* The alert then comes before the next
  event of the burst. A dated `peers` label that says whether the name had an event in the last ten
  sessions takes most of it away (*recent 10* in section 4).

A holdout does not help against these: what drives both sides goes on driving them.""",
    "level": """## 1. Level of the nulls

Nothing is planted: every combination is noise. Share of the family with p at or below each level;
nominal is the level itself, and a claim *holds* up to 1.2 times nominal. Hits are whole numbers, so
shares lie below nominal where few hits are expected; the column for combinations with at least
five expected hits shows what that hides. Exchanges use 999 draws on the first 50 seeds, the plain
shuffle 99 draws on the first 8.

{table}

![Level by world and null](figures/level.svg)

Own timing and the plain shuffle break as soon as a season, a shock or a sector moves alerts and
events together. They answer other questions and are no gate.""",
    "forms": """## 2. Do the two forms of the margins null agree?

Mean and spread of hits in exchanged worlds against the closed form (combinations with five or more
expected hits). *Whole runs* is a trial form of the exchanges: instead of single events, runs of
window cells of equal length change places, so that margins of the *windows*, which the closed form
holds, are held exactly.

{table}

Where an entity's events come in bursts, exchanging single events pulls bursts apart; windows that
overlapped no longer do, the drawn worlds hold more window cells than the observed one, and drawn
hits come out too many. That errs on the careful side (level near 0), but it costs Westfall-Young
its power there (sections 7 and 9). The placebo is not touched: each of its worlds is judged by
margins of its own.""",
    "laws": """## 3. When names and sessions combine by another law

The margins null gives a window the odds u(e) v(g, t). Here one season, market shocks and busy names
drive alerts and events, and the chance of an event on a session follows odds that multiply, a rate
(hazard) that multiplies, or a sum. *hazard* is the margins null with q = 1 - exp(-u v) in place of
q = u v / (1 + u v), fitted to the same margins.

{table}

Events that arrive at a multiplying rate leave a window empty with chance exp(-u v). Where windows
are rare the two forms agree; where a busy name meets a busy session, odds expect too few hits.""",
    "remedies": """## 4. Remedies tried for what is not held

Share of null combinations with p at most .05. *hazard*: the same margins, but busy names and busy
sessions multiply the rate of events instead of the odds of a window. *rows by n*: an entity's own
rate starts afresh every n sessions. *recent 10*: peer groups are split by whether the entity had an
event in the last ten sessions. *clustered*: normal scores divided by the two-way clustered spread
of the residuals. *deflated*: scores moved and scaled by the left-over inflation of the family
against drawn worlds (genomic control; Devlin & Roeder 1999).

{table}""",
    "power": """Power at the same time: share of planted pairs (200 plantings, about four times
a base rate of 5 %) with p at most .001. In worlds where a null's level is broken its power means
nothing.

{table}""",
    "warnings": """## 5. Warnings tried

Share of worlds flagged at p at most .05, against drawn worlds. *family inflated*: median
standardised excess of the whole family. *spells*: products of an entity's residuals two to five
date blocks apart. *together*: largest eigenvalue of products between entities.

{table}""",
    "nothing": """## 6. Whole hunts where there is nothing to find

Share of hunts that end with any rule, at a nominal 1 % / 5 % / 10 %. With nothing to find, any rule
is false, so this share is the false discovery rate. *bh, hazard* is the share with any combination
passed when the hazard form stands at the gate.

{table}""",
    "planted": """## 7. Whole hunts with planted combinations

One to five plants of one to three types, 20 to 2,000 triggers, precision 1.5 to 8 times the base
rate (70 % of the calendar is discovery), 14 types of 800 alerts. A rule is *found* when it is a
plant; *near* when it holds more or fewer types of one; it may *share a type* with one (such a
combination does precede more events than chance: the plant's triggers are among its own), or be
*unrelated*. FDR is the mean over hunts of the share of wrong rules, 0 where there is no rule.

{table}

![Recovery by lift and number of triggers](figures/recovery.svg)

Few triggers and little lift are missed: the figure says what a log of a given size can show.""",
    "adjustments": """## 8. Other adjustments at the same level

Before explaining away, over the same hunts: share of plants that pass, share of passing
combinations that share no type with any plant (FDR), share of hunts with any. *dbh-sd*: discrete
step-down (Doehler, Durand & Roquain 2018); *heyse*: Heyse (2011); *drawn*: false discoveries
counted in exchanged worlds; *tarone*: Bonferroni over what could be significant at all (Tarone
1990).

{table}""",
    "joint": """## 9. The joint law for Westfall-Young

Share of worlds with any combination at an adjusted p of at most 5 and 10 %, nothing planted, and
share of planted pairs found (p-values by the hazard form). *exchanges* ranks drawn hits by the
closed form's rates, as the tool does; *own mean* by those rates tilted to the mean of each
combination's draws; *whole runs* draws by the trial form of section 2.

{table}

*Own mean* was not adopted. With p-values by the odds form it holds only where the closed form does:
over 125 whole hunts of "calendar, busy, common" with nothing to find, 38 % reported a rule at a
nominal 5 %, against 4 % with one yardstick for draws and observed alike (section 6), which is valid
whatever the yardstick. What that costs where events come in bursts stands in the columns above.""",
    "intervals": """## 10. Intervals for a precision

Share of 95 % intervals that hold the true precision, when triggers hang together by entity and by
date (random effects on the logit).

{table}""",
    "placebo": """## 11. Placebo against truth

At a nominal 20 %, where false rules can be counted: false rules a hunt really found, beside the
mean over 20 worlds drawn for the placebo from the same data (with plants: rules unrelated to any).

{table}

The placebo is drawn by the gate's own null, so it cannot warn of what that null does not hold: in
the worlds in italics it stays low while false rules are found.""",
    "practice": """## 12. Usual practice on pure noise

Combinations reported at a nominal 5 %, mean a world and share of worlds with any, when nothing is
there. Usual practice mines combinations frequent before events with a lift above 1.2 and adjusts
(Benjamini-Hochberg) over those: against the base rate (binomial), against alerts shuffled within
each entity's life, against histories shifted in a circle. The last columns are this tool's gate
over the whole family, the same with the hazard form, and this tool's rules.

{table}""",
    "foot": """## How to make it again

```
python -m tests.calibration --form full --report reports
```

One core. {runs} runs, {minutes} minutes; each is one json line in `build/calibration/full`, so that
an interruption loses nothing and a run that is there is not made again. `--part NAME` runs one
part. Seeds: level 10,000 on, hunts without plants 20,000 on, with plants 30,000 on, power 40,000
on, intervals 50,000, placebo 60,000 on, usual practice 70,000 on, laws 80,000 on, joint law
90,000 on. The everyday suite runs a short form with fixed seeds (`tests/test_calibration.py`) and
fails when a level breaks.

Versions: {versions}.""",
}
