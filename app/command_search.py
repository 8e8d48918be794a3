"""The command search: every action by a few letters of its name."""

from __future__ import annotations

from collections.abc import Mapping

from PySide6.QtCore import Qt, QTimer
from PySide6.QtGui import QAction
from PySide6.QtWidgets import QDialog, QLineEdit, QListWidget, QVBoxLayout, QWidget

from app.actions import ENTRIES
from app.fonts import font


class CommandSearch(QDialog):
    """Type a few letters of a command's name; Return runs it."""

    def __init__(self, parent: QWidget, actions: Mapping[str, QAction]) -> None:
        super().__init__(parent)
        self.actions_by_method = actions
        self.setWindowTitle("Commands")
        self.resize(460, 380)
        self.field = QLineEdit()
        self.field.setPlaceholderText("a few letters of a command")
        self.list = QListWidget()
        self.list.setFont(font("sans", 13))
        layout = QVBoxLayout(self)
        layout.addWidget(self.field)
        layout.addWidget(self.list)
        self.field.textChanged.connect(self.fill)
        self.field.returnPressed.connect(self.run)
        self.list.itemActivated.connect(lambda *_: self.run())
        self.fill("")

    def fill(self, text: str) -> None:
        self.list.clear()
        wanted = text.lower().split()
        for entry in ENTRIES:
            if all(word in f"{entry.menu} {entry.name}".lower() for word in wanted):
                action = self.actions_by_method[entry.method]
                why = "" if action.isEnabled() else f"   needs {entry.needs}"
                self.list.addItem(f"{entry.name}    {entry.shortcut}{why}")
                self.list.item(self.list.count() - 1).setData(Qt.ItemDataRole.UserRole, entry.method)
        self.list.setCurrentRow(0)

    def run(self) -> None:
        item = self.list.currentItem()
        if item is None:
            return
        action = self.actions_by_method[item.data(Qt.ItemDataRole.UserRole)]
        if action.isEnabled():
            self.accept()
            QTimer.singleShot(0, action.trigger)
