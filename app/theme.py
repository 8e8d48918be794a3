"""Qt's colours from the shared palettes: paper and blueprint."""

from __future__ import annotations

from PySide6.QtCore import Qt
from PySide6.QtGui import QColor, QGuiApplication, QPalette

from core.drawing.palette import Palette


def qt_palette(palette: Palette) -> QPalette:
    ink, soft = QColor(palette["ink"]), QColor(palette["soft"])
    made = QPalette()
    for role, value in (
        (QPalette.ColorRole.Window, palette["panel"]),
        (QPalette.ColorRole.Base, palette["field"]),
        (QPalette.ColorRole.AlternateBase, palette["panel"]),
        (QPalette.ColorRole.Button, palette["panel"]),
        (QPalette.ColorRole.ToolTipBase, palette["field"]),
        (QPalette.ColorRole.Highlight, palette["wash"]),
    ):
        made.setColor(role, QColor(value))
    for role in (
        QPalette.ColorRole.WindowText,
        QPalette.ColorRole.Text,
        QPalette.ColorRole.ButtonText,
        QPalette.ColorRole.ToolTipText,
        QPalette.ColorRole.HighlightedText,
    ):
        made.setColor(role, ink)
    made.setColor(QPalette.ColorRole.PlaceholderText, soft)
    made.setColor(QPalette.ColorRole.Link, QColor(palette["accent"]))
    for role in (QPalette.ColorRole.WindowText, QPalette.ColorRole.Text, QPalette.ColorRole.ButtonText):
        made.setColor(QPalette.ColorGroup.Disabled, role, soft)
    return made


def style_sheet(palette: Palette) -> str:
    """Line work instead of boxes: rules between panels, the accent only where the eye should go."""
    line, soft, ink, accent = palette["faint"], palette["soft"], palette["ink"], palette["accent"]
    return f"""
    QMainWindow::separator {{ background: {line}; width: 1px; height: 1px; }}
    QDockWidget {{ titlebar-close-icon: none; titlebar-normal-icon: none; }}
    QDockWidget::title {{ text-align: left; padding: 6px 10px; border-bottom: 1px solid {line}; }}
    QPlainTextEdit, QTextBrowser, QTreeWidget, QListWidget {{ border: none; background: {palette["field"]}; }}
    QTreeWidget::item, QListWidget::item {{ padding: 3px 2px; }}
    QTreeWidget::item:selected, QListWidget::item:selected {{ background: {palette["wash"]}; color: {ink}; }}
    QHeaderView::section {{ background: {palette["panel"]}; color: {soft}; border: none; border-bottom: 1px solid {line}; padding: 4px; }}
    QMenuBar, QMenu, QStatusBar {{ background: {palette["panel"]}; color: {ink}; }}
    QMenu::item:selected, QMenuBar::item:selected {{ background: {palette["wash"]}; color: {ink}; }}
    QMenu::item:disabled {{ color: {soft}; }}
    QPushButton {{ border: 1px solid {soft}; padding: 4px 10px; background: transparent; }}
    QPushButton:hover, QPushButton:focus {{ border-color: {accent}; color: {accent}; }}
    QPushButton:disabled {{ color: {soft}; border-color: {line}; }}
    QLineEdit {{ border: 1px solid {line}; padding: 4px; background: {palette["field"]}; }}
    QLineEdit:focus {{ border-color: {accent}; }}
    QTabBar::tab {{ padding: 5px 12px; border: none; color: {soft}; background: transparent; }}
    QTabBar::tab:selected {{ color: {ink}; border-bottom: 2px solid {ink}; }}
    QTabWidget::pane {{ border: none; border-top: 1px solid {line}; }}
    QToolTip {{ background: {palette["field"]}; color: {ink}; border: 1px solid {soft}; }}
    """


def system_is_dark() -> bool:
    hints = QGuiApplication.styleHints()
    return hints.colorScheme() == Qt.ColorScheme.Dark
