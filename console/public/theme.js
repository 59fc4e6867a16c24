// Blocking and tiny, so that the first paint has the chosen theme. console/lib/theme.ts writes the choice.
try {
  const theme = localStorage.getItem('heftwise.theme')
  if (theme === 'light' || theme === 'dark') document.documentElement.dataset.theme = theme
} catch {
  // Storage may be blocked; the system's theme applies.
}
