// Moves over the plate by arrow keys and shows the selected well beside it; without this file, links do the same.
const plate = document.getElementById("plate");
const side = document.getElementById("well");
const wells = [...plate.querySelectorAll("a.well")];
const at = new Map(wells.map((well) => [`${well.dataset.row} ${well.dataset.column}`, well]));
let asked = 0;

function current() {
  return plate.querySelector("a.chosen") || wells[0];
}

async function choose(well, focus = true) {
  if (!well) return;
  for (const each of plate.querySelectorAll("a.chosen")) each.classList.remove("chosen");
  well.classList.add("chosen");
  for (const each of wells) each.setAttribute("tabindex", each === well ? "0" : "-1");
  if (focus) well.focus({ preventScroll: true });
  const mine = ++asked;
  const name = well.dataset.well;
  const answer = await fetch(`/plate/${plate.dataset.analysis}/well/${encodeURIComponent(name)}`);
  if (mine !== asked) return;
  if (answer.redirected || answer.status === 401) { location.href = "/sign-in"; return; }
  side.innerHTML = await answer.text();
  const address = new URL(location.href);
  address.searchParams.set("well", name);
  history.replaceState(null, "", address);
}

function beside(well, down, across) {
  let row = Number(well.dataset.row) + down;
  let column = Number(well.dataset.column) + across;
  for (let step = 0; step < 48; step += 1, row += down, column += across) {
    const found = at.get(`${row} ${column}`);
    if (found) return found;
  }
  return null;
}

function next(selector, from, way) {
  const all = wells.filter((well) => well.matches(selector));
  const place = wells.indexOf(from);
  const later = all.filter((well) => (wells.indexOf(well) - place) * way > 0);
  return way > 0 ? later[0] || all[0] : later[later.length - 1] || all[all.length - 1];
}

const MOVES = { ArrowUp: [-1, 0], ArrowDown: [1, 0], ArrowLeft: [0, -1], ArrowRight: [0, 1] };

document.addEventListener("keydown", (event) => {
  if (event.ctrlKey || event.metaKey || event.altKey || event.target.closest("input, textarea, select")) return;
  if (event.key in MOVES && !event.target.closest("main a:not(.well)")) {
    event.preventDefault();
    choose(beside(current(), ...MOVES[event.key]));
  } else if (event.key === "n" || event.key === "p") {
    choose(next("a.held", current(), event.key === "n" ? 1 : -1));
  }
});

document.addEventListener("click", (event) => {
  const link = event.target.closest("a[data-well]");
  if (!link || event.ctrlKey || event.metaKey || event.shiftKey) return;
  const well = wells.find((each) => each.dataset.well === link.dataset.well);
  if (!well) return;
  event.preventDefault();
  choose(well);
});

for (const each of wells) each.setAttribute("tabindex", each === current() ? "0" : "-1");
