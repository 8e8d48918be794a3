"""Every action of the window as data: menus, shortcuts, the command search and the documentation are made of it."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Entry:
    """`method` is the window's; `needs` is what must be there, in words, for a disabled action to say why."""

    menu: str
    name: str
    shortcut: str
    method: str
    needs: str = ""
    checkable: bool = False


ENTRIES: tuple[Entry, ...] = (
    Entry("Sheet", "New sheet", "Ctrl+N", "new_sheet"),
    Entry("Sheet", "Open…", "Ctrl+O", "open_dialog"),
    Entry("Sheet", "Open the demo", "", "open_demo"),
    Entry("Sheet", "Read data from a folder or file…", "Ctrl+Shift+D", "data_dialog"),
    Entry("Sheet", "Save", "Ctrl+S", "save"),
    Entry("Sheet", "Save as…", "Ctrl+Shift+S", "save_dialog"),
    Entry("Sheet", "Export the sheet…", "Ctrl+E", "export_dialog", "a drawing"),
    Entry("Sheet", "Name the sheet…", "", "title_dialog"),
    Entry("Sheet", "Quit", "Ctrl+Q", "close"),
    Entry("Edit", "Undo", "Ctrl+Z", "undo", "an edit"),
    Entry("Edit", "Redo", "Ctrl+Shift+Z", "redo", "an edit taken back"),
    Entry("Edit", "Copy as SQL", "Ctrl+Shift+C", "copy_sql", "a drawing"),
    Entry("Edit", "Copy the tree as text", "", "copy_tree", "a drawing"),
    Entry("Edit", "Copy the drawing", "", "copy_drawing", "a drawing"),
    Entry("Edit", "Note at this operator…", "Ctrl+Shift+N", "note_dialog", "a selected operator"),
    Entry("Edit", "Search a command…", "Ctrl+K", "search_commands"),
    Entry("Query", "Next formulation", "Ctrl+Tab", "next_draft", "two formulations"),
    Entry("Query", "New formulation", "Ctrl+Shift+F", "add_draft"),
    Entry("Query", "Second formulation from this one", "Ctrl+D", "copy_draft", "a drawing"),
    Entry("Query", "Take this formulation off the sheet", "", "remove_draft", "two formulations"),
    Entry("Query", "Open a query from the demo…", "Ctrl+Shift+O", "demo_dialog"),
    Entry("Query", "Measure the sizes", "Ctrl+M", "measure", "data"),
    Entry("Query", "Find a better formulation", "Ctrl+B", "improve", "a drawing"),
    Entry("Query", "Apply the marked rewrite", "Ctrl+Return", "apply_rewrite", "a selected operator"),
    Entry("Query", "Earlier revision", "Alt+Left", "earlier", "an earlier revision"),
    Entry("Query", "Later revision", "Alt+Right", "later", "a later revision"),
    Entry("Query", "Compare the formulations", "Ctrl+Shift+V", "compare", "two formulations"),
    Entry("Query", "Save the witness as SQL…", "", "witness_dialog", "a witness"),
    Entry("Query", "Stop", "Ctrl+.", "stop", "work under way"),
    Entry("View", "Drawing", "F6", "focus_canvas"),
    Entry("View", "Text", "F7", "focus_text"),
    Entry("View", "Rewrites at the operator", "F8", "focus_rewrites"),
    Entry("View", "Findings", "F9", "show_findings"),
    Entry("View", "Verdict", "F10", "show_verdict"),
    Entry("View", "Revisions", "F11", "show_revisions"),
    Entry("View", "Catalog", "F12", "show_catalog"),
    Entry("View", "Side by side", "Ctrl+2", "toggle_beside", "", True),
    Entry("View", "Print view", "Ctrl+P", "toggle_print", "a drawing", True),
    Entry("View", "Blueprint", "Ctrl+I", "toggle_dark", "", True),
    Entry("View", "Fit the drawing", "Ctrl+0", "fit"),
    Entry("View", "Larger", "Ctrl+=", "larger"),
    Entry("View", "Smaller", "Ctrl+-", "smaller"),
    Entry("View", "Actual size", "Ctrl+1", "actual_size"),
    Entry("Help", "About these numbers", "F1", "about"),
)
