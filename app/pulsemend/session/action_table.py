"""The table of actions. Titles are plain words; keys are those of the platform (design, section 2)."""

from __future__ import annotations

from pulsemend.session.actions import Action, Condition, Menu, Where, check_actions
from pulsemend.session.conditions import (
    can_redo,
    can_undo,
    has_both,
    has_changed_plan,
    has_events,
    has_hidden,
    has_picked,
    has_plan,
    has_pulse_selected,
    has_pulses,
    has_recording,
    has_selected,
    has_set,
    has_stretch_selected,
)
from pulsemend.session.found import Stage
from pulsemend.session.view import Shown


def _shows(shown: Shown) -> Condition:
    return lambda session: session.view.shown is shown


def _is_open(stage: Stage) -> Condition:
    return lambda session: session.stage is stage


_FILE = (
    Action(
        "open_recording",
        "Open a recording...",
        "Choose a recording to look at and mend",
        Menu.FILE,
        keys=("Ctrl+O",),
        icon="recording",
        toolbar=True,
    ),
    Action(
        "open_plan",
        "Open a plan...",
        "Choose the plan of the study",
        Menu.FILE,
        keys=("Ctrl+Shift+O",),
        icon="plan",
        toolbar=True,
    ),
    Action(
        "open_folder",
        "Open a folder...",
        "Choose a folder with a recording and its plan",
        Menu.FILE,
        keys=("Ctrl+Alt+O",),
        icon="folder",
    ),
    Action("open_recent", "Recent recordings", "Open a recording that was open before", Menu.FILE),
    Action(
        "draft_plan",
        "Draft a plan from this recording",
        "Propose a first plan; what a person must decide is marked",
        Menu.FILE,
        2,
        keys=("Ctrl+N",),
        icon="draft",
        enabled=has_recording,
    ),
    Action(
        "save_plan",
        "Save the plan",
        "Write the plan to its file; marks are saved by themselves",
        Menu.FILE,
        2,
        keys=("Ctrl+S",),
        icon="save",
        enabled=has_changed_plan,
        toolbar=True,
    ),
    Action(
        "save_plan_as",
        "Save the plan as...",
        "Write the plan to another file and go on with that one",
        Menu.FILE,
        2,
        keys=("Ctrl+Shift+S",),
        enabled=has_plan,
    ),
    Action("close_window", "Close this window", "Close the window", Menu.FILE, 3, keys=("Ctrl+W",)),
    Action("quit", "Quit", "Close all windows and end the program", Menu.FILE, 3, keys=("Ctrl+Q",)),
)

_EDIT = (
    Action(
        "undo",
        "Undo",
        "Take the last change of plan or marks back",
        Menu.EDIT,
        keys=("Ctrl+Z",),
        icon="undo",
        enabled=can_undo,
        toolbar=True,
    ),
    Action(
        "redo",
        "Redo",
        "Do the change that was taken back again",
        Menu.EDIT,
        keys=("Ctrl+Shift+Z", "Ctrl+Y"),
        icon="redo",
        enabled=can_redo,
        toolbar=True,
    ),
    Action(
        "find_action",
        "Find an action...",
        "Type a few letters of what you want to do",
        Menu.EDIT,
        2,
        keys=("Ctrl+K",),
        icon="find",
        toolbar=True,
    ),
)

_TRACES = (
    *(
        Action(
            f"show_{shown.name.lower()}",
            title,
            tooltip,
            Menu.TRACES,
            keys=(f"Ctrl+{number}",),
            enabled=has_recording if shown is Shown.RECORDED else has_both,
            checked=_shows(shown),
            handler="show",
            argument=shown.value,
        )
        for number, (shown, title, tooltip) in enumerate(
            (
                (Shown.RECORDED, "Show as recorded", "Show the samples of the file"),
                (Shown.REPAIRED, "Show repaired", "Show the signal with its gaps filled, not yet filtered"),
                (Shown.BOTH, "Show both", "Show the repaired signal over the recorded one"),
            ),
            start=1,
        )
    ),
    Action(
        "wider",
        "Show more time",
        "Make the part in view longer",
        Menu.TRACES,
        2,
        keys=("Ctrl+Down",),
        icon="wider",
        enabled=has_recording,
    ),
    Action(
        "narrower",
        "Show less time",
        "Make the part in view shorter",
        Menu.TRACES,
        2,
        keys=("Ctrl+Up",),
        icon="narrower",
        enabled=has_recording,
    ),
    Action(
        "rows_larger",
        "Draw waves larger",
        "Let a row stand for fewer microvolts",
        Menu.TRACES,
        2,
        keys=("Ctrl+Shift+Up",),
        icon="larger",
        enabled=has_recording,
    ),
    Action(
        "rows_smaller",
        "Draw waves smaller",
        "Let a row stand for more microvolts",
        Menu.TRACES,
        2,
        keys=("Ctrl+Shift+Down",),
        icon="smaller",
        enabled=has_recording,
    ),
    Action(
        "measure",
        "Measure between two points",
        "Show time and voltage between two points of the traces",
        Menu.TRACES,
        2,
        keys=("Ctrl+M",),
        icon="measure",
        enabled=has_recording,
    ),
    Action(
        "pick_channels",
        "Pick channels...",
        "Choose channels by name, type or group",
        Menu.TRACES,
        3,
        keys=("Ctrl+F",),
        icon="channels",
        enabled=has_recording,
    ),
    Action(
        "pick_all",
        "Pick all channels in view",
        "Pick every channel that is shown",
        Menu.TRACES,
        3,
        keys=("Ctrl+A",),
        where=Where.TRACES,
        enabled=has_recording,
    ),
    Action(
        "pick_none",
        "Pick nothing",
        "Let go of the picked channels and of what is selected",
        Menu.TRACES,
        3,
        keys=("Esc",),
        where=Where.TRACES,
        enabled=has_recording,
    ),
    Action(
        "hide_picked",
        "Hide picked channels",
        "Leave the picked channels out of the traces; nothing else changes",
        Menu.TRACES,
        3,
        keys=("Ctrl+H",),
        enabled=has_picked,
    ),
    Action(
        "show_all_channels",
        "Show all channels",
        "Show every channel of the recording again",
        Menu.TRACES,
        3,
        keys=("Ctrl+Shift+H",),
        enabled=has_hidden,
    ),
)


def _go(
    name: str,
    title: str,
    tooltip: str,
    section: int,
    *keys: str,
    where: Where = Where.TRACES,
    enabled: Condition = has_recording,
) -> Action:
    return Action(name, title, tooltip, Menu.GO, section, keys=keys, where=where, enabled=enabled)


_GO = (
    _go("go_to_time", "Time...", "Type a time in seconds or h:mm:ss", 1, "Ctrl+G", where=Where.WINDOW),
    _go("earlier", "A little earlier", "Move a tenth of the view to the left", 2, "Left"),
    _go("later", "A little later", "Move a tenth of the view to the right", 2, "Right"),
    _go("page_earlier", "One view earlier", "Move one view to the left", 2, "PgUp"),
    _go("page_later", "One view later", "Move one view to the right", 2, "PgDown"),
    _go("to_start", "Start of the recording", "Show the first samples", 2, "Home"),
    _go("to_end", "End of the recording", "Show the last samples", 2, "End"),
    _go("channels_up", "Channels above", "Move one row up", 3, "Up"),
    _go("channels_down", "Channels below", "Move one row down", 3, "Down"),
    _go("next_pulse", "Next pulse", "Bring the next pulse into view", 4, "Ctrl+Right", enabled=has_pulses),
    _go(
        "previous_pulse",
        "Previous pulse",
        "Bring the pulse before into view",
        4,
        "Ctrl+Left",
        enabled=has_pulses,
    ),
    _go(
        "choose_event_kind",
        "Which events...",
        "Choose the role or code that the next two actions look for",
        4,
        enabled=has_events,
    ),
    _go(
        "next_event",
        "Next event",
        "Bring the next event into view",
        4,
        "F3",
        where=Where.WINDOW,
        enabled=has_events,
    ),
    _go(
        "previous_event",
        "Previous event",
        "Bring the event before into view",
        4,
        "Shift+F3",
        enabled=has_events,
    ),
)

_MARK = (
    Action(
        "toggle_bad",
        "Picked channels bad or not",
        "Mark the picked channels bad in this recording, or take that back",
        Menu.MARK,
        keys=("Ctrl+B",),
        icon="bad",
        enabled=has_picked,
    ),
    Action(
        "mark_stretch",
        "Selected stretch is bad...",
        "Leave the selected stretch out of everything, and say why",
        Menu.MARK,
        keys=("Ctrl+Shift+B",),
        icon="stretch",
        enabled=has_stretch_selected,
    ),
    Action(
        "add_pulse",
        "Add a pulse here",
        "Add a pulse at the cursor",
        Menu.MARK,
        2,
        keys=("Ctrl+Ins",),
        icon="add_pulse",
        enabled=has_both,
    ),
    Action(
        "move_pulse",
        "Move the pulse...",
        "Give the selected pulse another onset",
        Menu.MARK,
        2,
        keys=("F2",),
        enabled=has_pulse_selected,
    ),
    Action(
        "remove_selected",
        "Remove what is selected",
        "Say that the selected pulse is none, or that the selected bad stretch is good",
        Menu.MARK,
        2,
        keys=("Del",),
        where=Where.TRACES,
        enabled=has_selected,
    ),
)

_SET = (
    Action(
        "mend",
        "Write the set...",
        "Mend the whole recording and write its epoch set",
        Menu.SET,
        keys=("Ctrl+Return",),
        icon="mend",
        enabled=has_both,
        toolbar=True,
    ),
    Action(
        "stop_job",
        "Stop what is running",
        "Stop the running job; no half file stays",
        Menu.SET,
        keys=("Shift+Esc",),
        icon="stop",
    ),
    Action(
        "check_set",
        "Check a set...",
        "Read an epoch set back and show each check with its evidence",
        Menu.SET,
        2,
        keys=("Ctrl+Shift+K",),
        icon="check",
    ),
    Action(
        "show_folder",
        "Show the folder",
        "Show the folder of the set written last",
        Menu.SET,
        2,
        keys=("Ctrl+Shift+F",),
        icon="folder",
        enabled=has_set,
    ),
)

_STAGE_KEYS = {
    Stage.RECORDING: "Ctrl+Shift+R",
    Stage.MARKERS: "Ctrl+Shift+M",
    Stage.PULSES: "Ctrl+Shift+P",
    Stage.EPOCHS: "Ctrl+Shift+E",
    Stage.REVIEW: "Ctrl+Shift+V",
    Stage.EXPORT: "Ctrl+Shift+X",
    Stage.ROSTER: "Ctrl+Shift+T",
}

_STAGES = tuple(
    Action(
        f"stage_{stage.name.lower()}",
        stage.value,
        f"Open the stage {stage.value}",
        Menu.STAGES,
        keys=(_STAGE_KEYS[stage],),
        icon=f"stage_{stage.name.lower()}",
        checked=_is_open(stage),
        handler="open_stage",
        argument=stage.value,
    )
    for stage in Stage
)

_LOOKS = (
    *(
        Action(f"theme_{word}", title, tooltip, Menu.LOOKS, handler="set_theme", argument=word)
        for word, title, tooltip in (
            ("system", "Colours of the system", "Light or dark as the system has it"),
            ("light", "Light colours", "Always light"),
            ("dark", "Dark colours", "Always dark"),
        )
    ),
    *(
        Action(f"text_{word}", title, tooltip, Menu.LOOKS, 2, handler="set_text_size", argument=word)
        for word, title, tooltip in (
            ("larger", "Larger text", "Make all text larger, up to twice its usual size"),
            ("smaller", "Smaller text", "Make all text smaller again"),
            ("usual", "Usual text size", "Text as large as the system has it"),
        )
    ),
)

_HELP = (
    Action(
        "help", "Guide", "Read how the program is used", Menu.HELP, keys=("F1",), icon="help", toolbar=True
    ),
    Action("keys_help", "Keys", "See all keys at a glance", Menu.HELP, keys=("Ctrl+F1",)),
    Action("notice", "Safety notice", "Read what the program is and is not for", Menu.HELP, 2),
    Action(
        "copy_details",
        "Copy details for a fault report",
        "Copy versions and settings, without names and paths, to the clipboard",
        Menu.HELP,
        2,
    ),
    Action("about", "About Pulsemend", "See version, licences and the safety notice", Menu.HELP, 2),
)

ACTIONS: tuple[Action, ...] = (
    *_FILE,
    *_EDIT,
    *_TRACES,
    *_GO,
    *_MARK,
    *_SET,
    *_STAGES,
    *_LOOKS,
    *_HELP,
)
"""Every action of the window."""

check_actions(ACTIONS)
