"use strict";
// Before anything is drawn: the look that was chosen here last, if one was.
{
  let kept = null;
  try { kept = localStorage.getItem("theme"); } catch { /* storage may be forbidden */ }
  if (kept === "light" || kept === "dark") document.documentElement.dataset.theme = kept;
}
