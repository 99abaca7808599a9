"""The style sheet of the screens: sizes and colours, by layout."""

from __future__ import annotations

from typing import Final

from textual.theme import Theme

from benchkit.ui.look import CARE, FAIL, GROUND, INK, LINE, PANEL, PASS, QUIET, STRONG, SUPPLY_COLOURS

THEME: Final = Theme(
    name="bench", primary=PASS, foreground=INK, background=GROUND, surface=PANEL, panel=PANEL, dark=True
)  # fmt: skip

SHEET: Final = f"""
Screen {{ background: {GROUND}; color: {INK}; layout: vertical; overflow: hidden; }}
.too-small {{ display: none; height: 1fr; padding: 0 1; text-style: bold; color: {CARE}; }}

VerticalScroll {{ scrollbar-size-vertical: 1; scrollbar-color: {LINE}; scrollbar-background: {GROUND}; }}

OffLine {{ dock: bottom; height: auto; max-height: 3; padding: 0 1; background: {PANEL}; color: {INK}; }}
OffLine Words {{ height: 1; width: 1fr; }}
OffLine .off-second {{ height: auto; max-height: 2; }}
OffLine.supply-on {{ background: {SUPPLY_COLOURS["on"]}; color: #000000; text-style: bold; }}
OffLine.supply-unknown {{ background: {SUPPLY_COLOURS["unknown"]}; color: #000000; text-style: bold; }}
OffLine.supply-calm {{ color: {CARE}; text-style: bold; }}
OffLine.flash {{ text-style: reverse bold; }}

.walk-head {{ height: 1; padding: 0 1; background: {PANEL}; }}
.walk-trail {{ height: 1; padding: 0 1; margin-bottom: 1; }}
.walk-message {{ height: auto; max-height: 2; padding: 0 1; color: {CARE}; }}
.walk-message.tripped {{ color: {FAIL}; text-style: bold reverse; }}
.walk-pages {{ height: 1fr; }}
Page {{ height: 1fr; width: 1fr; }}

Card {{ height: 1fr; padding: 0 1; }}
.card-do {{ height: auto; padding: 0 2; border-left: thick {CARE}; margin-bottom: 1; max-width: 76; }}
.card-do.waiting {{ border-left: thick {LINE}; }}
.card-details {{ height: auto; padding: 0 1; max-width: 100; }}
.card-suspects {{ height: auto; padding: 0 1; margin-bottom: 1; max-width: 100; }}
.explained .card-do {{ display: none; }}

Outcome {{ height: auto; padding: 0 1; border-top: solid {LINE}; }}
.outcome-head {{ height: 1; }}
.outcome-gauge {{ margin: 0 2; }}
.outcome-why {{ height: auto; max-height: 2; }}
.outcome-earlier {{ display: none; height: auto; margin-top: 1; }}

Answer {{ height: auto; padding: 0 1; border-top: solid {LINE}; }}
Answer {{ border-title-color: {CARE}; border-title-align: right; }}
.answer-hint {{ height: auto; color: {INK}; }}
.refused {{ color: {FAIL}; text-style: bold; }}
Choices {{ height: auto; }}
Input {{ background: {PANEL}; color: {STRONG}; }}
Input:focus {{ background-tint: {STRONG} 6%; }}
.answer-entry {{ width: 1fr; max-width: 50; }}

.hold-title {{ height: auto; padding: 0 2; border-top: double {CARE}; color: {CARE}; text-style: bold; }}
.hold-title {{ margin-bottom: 1; }}
#hold {{ border-bottom: double {CARE}; }}
.deciding {{ border-top: none; margin-bottom: 1; }}
.deciding .outcome-why {{ max-height: 4; margin-top: 1; }}
.explained .outcome-why {{ max-height: 2; margin-top: 0; }}

#trim .card {{ height: auto; max-height: 2; }}
#trim .card-details {{ display: none; }}
#trim Answer {{ border-top: none; }}
#trim .card-do {{ margin-bottom: 0; }}
.live-panel {{ height: 1fr; }}
.live-mood {{ height: auto; max-height: 2; padding: 0 1; }}
.live-figures {{ layout: horizontal; height: 7; margin: 0 1; }}
.live-reading {{ width: 1fr; height: 100%; }}
.live-ring {{ width: 15; height: 100%; margin: 0 1; }}
.empty-ring {{ visibility: hidden; }}
.live-facts {{ height: auto; max-height: 2; padding: 0 1; }}
.live-trend {{ height: 1fr; margin: 0 1; }}
.trim-turns {{ height: 1; padding: 0 1; }}
.walking .trim-turns {{ display: none; }}
.soak-stands {{ height: auto; max-height: 2; padding: 0 1; }}

.watch-stands {{ height: auto; max-height: 2; padding: 0 1; margin: 1 0; }}
.watch-figures {{ height: 5; margin: 0 2; }}
.watch-reading {{ width: 1fr; }}
.tight Outcome .outcome-gauge, .tight Outcome .outcome-why {{ display: none; }}

.probe-strip {{ height: 6; padding: 0 1; border-top: solid {LINE}; }}
.probe-reading {{ width: 48; height: 5; }}
.probe-words {{ width: 1fr; height: auto; max-height: 5; }}
.without-reading {{ height: 2; }}
.probing Outcome .outcome-gauge, .probing Outcome .outcome-why {{ display: none; }}

.empty {{ display: none; }}

.summary-verdict {{ height: auto; padding: 0 1; margin-bottom: 1; }}
.summary-scroll {{ height: 1fr; padding: 0 1; }}
.summary-enter {{ height: 1; padding: 0 1; }}
.small .summary-enter {{ display: none; }}
.summary-body {{ height: auto; }}

.start-body {{ height: 1fr; padding: 1 2 0 2; }}
.start-title {{ height: auto; margin-bottom: 1; }}
.start-deference {{ height: auto; border-left: thick {CARE}; padding: 0 2; margin-bottom: 1; max-width: 100; }}
.start-facts {{ height: auto; max-width: 100; }}
.start-entries {{ layout: grid; grid-size: 2 2; grid-columns: 22 1fr; grid-rows: 1 1; height: 2; margin: 0 2; }}
.start-label {{ height: 1; color: {INK}; }}
.start-entries Input {{ max-width: 46; }}
.start-hint {{ height: auto; margin: 1 2; color: {QUIET}; }}
.start-hint.refused {{ color: {FAIL}; }}

LeaveScreen {{ background: {GROUND}; align: center middle; }}
.leave-box {{ width: 90%; max-width: 66; height: auto; margin: 1 0; padding: 0 2; border: double {CARE}; }}
.leave-words {{ height: auto; margin-bottom: 1; }}

.roomy .card-do {{ padding: 1 3; margin-bottom: 1; max-width: 100; background: {PANEL}; }}
.roomy .walk-trail {{ height: auto; max-height: 3; margin: 1 0; }}
.roomy .outcome-earlier {{ display: block; }}
.roomy .outcome-why {{ max-height: 4; }}
.roomy .start-title {{ margin-top: 2; margin-bottom: 2; }}
.roomy #trim Answer {{ border-top: solid {LINE}; }}
.roomy #trim .card {{ max-height: 4; }}
.roomy .walk-message {{ max-height: 3; }}
.roomy .watch-figures {{ height: 11; }}
.roomy #trim .card-do {{ padding: 0 3; background: {GROUND}; }}
.roomy .live-mood {{ padding: 1 2; max-height: 4; background: {PANEL}; }}
.roomy .live-figures {{ height: 12; }}
.roomy .live-ring {{ width: 25; margin: 0 2; }}
.roomy .probe-strip {{ height: 8; }}
.roomy .without-reading {{ height: 2; }}
.roomy .probe-reading {{ width: 64; height: 7; }}
.roomy .live-facts {{ margin: 1 0; }}
.roomy .soak-stands {{ margin-bottom: 1; }}

.small .walk-head, .small .walk-trail, .small .walk-message {{ display: none; }}
.small OffLine .off-second {{ max-height: 1; }}
.small .card-do {{ margin-bottom: 0; padding: 0 1; }}
.small Card, .small Outcome, .small Answer {{ padding: 0; }}
.small .card-details {{ padding: 0; }}
.small Outcome {{ border-top: none; }}
.small .outcome-gauge {{ margin: 0; }}
.small Answer {{ border-top: none; }}
.small .hold-title {{ border-top: none; margin: 0; padding: 0 1; height: 1; }}
.small #hold {{ border-bottom: none; }}
.small .deciding {{ margin-bottom: 0; }}
.small .outcome-why {{ display: none; }}
.small .deciding .outcome-why {{ display: block; max-height: 1; margin-top: 0; }}
.small #trim .card {{ display: none; }}
.small .live-mood {{ margin: 0; padding: 0; }}
.small .live-figures {{ height: 5; margin: 0; }}
.small .live-facts {{ padding: 0; }}
.small .live-trend, .small .live-ring {{ display: none; }}
.small .probe-strip {{ border-top: none; padding: 0; height: 5; }}
.small .without-reading {{ height: 1; }}
.small .probe-reading {{ width: 24; }}
.small .soak-stands {{ height: 1; padding: 0; }}
.small .watch-stands, .small .watch-figures {{ margin: 0; padding: 0; }}
.small .trim-turns {{ display: none; }}
.small .summary-verdict {{ margin: 0; padding: 0; }}
.small .start-body {{ padding: 0 1; }}
.small .start-title {{ margin: 0; }}
.small .start-deference {{ padding: 0 1; margin-bottom: 0; }}
.small .start-entries {{ margin: 0 1; grid-columns: 20 1fr; }}
.small .start-hint {{ margin: 0 1; max-height: 1; }}
.small .leave-box {{ width: 100%; margin: 0; padding: 0 1; }}
.small .leave-words {{ margin-bottom: 0; }}

.tiny .too-small {{ display: block; }}
.tiny .walk-head, .tiny .walk-trail, .tiny .walk-message, .tiny .walk-pages {{ display: none; }}
.tiny .start-body, .tiny .start-entries, .tiny .start-hint, .tiny .leave-box {{ display: none; }}
"""
