// One key goes to the first plate that needs a decision.
document.addEventListener("keydown", (event) => {
  if (event.key !== "n" || event.ctrlKey || event.metaKey || event.altKey) return;
  const first = document.querySelector(".plates a");
  if (first) first.click();
});
