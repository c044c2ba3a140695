"use strict";
// Order of the queue: entries carry their place by need and their onset.
const entries = document.getElementById("entries");
document.getElementById("order")?.addEventListener("change", (event) => {
  const key = event.target.value;
  const sorted = [...entries.children].sort((a, b) => a.dataset[key] - b.dataset[key]);
  entries.append(...sorted);
});

// A link to a flag opens the entry, or the list, that holds it.
const reveal = () => {
  const target = document.getElementById(location.hash.slice(1));
  for (let node = target; node; node = node.parentElement) {
    if (node.tagName === "DETAILS") node.open = true;
  }
  target?.scrollIntoView();
};
addEventListener("hashchange", reveal);
addEventListener("click", (event) => {
  if (event.target.closest('a[href^="#flag-"]')) setTimeout(reveal);
});
if (location.hash) reveal();

// An opened close-up shows its driving moment, however narrow the window is.
const centre = (entry) => {
  const strip = entry.querySelector(".strip");
  if (!entry.open || !strip) return;
  const names = strip.firstElementChild.getBoundingClientRect().width;
  const room = strip.clientWidth - names;
  strip.scrollLeft = strip.dataset.moment * (strip.scrollWidth - names) - room / 2;
};
for (const entry of entries?.children ?? []) {
  entry.addEventListener("toggle", () => centre(entry));
  centre(entry);
}

// The bar under the pointer or the focus is told in words above the ribbon.
const told = document.getElementById("told");
for (const kind of ["pointerover", "focusin"]) {
  document.querySelector(".ribbon")?.addEventListener(kind, (event) => {
    const mark = event.target.closest("a, rect, path");
    const title = (mark?.closest("a") ?? mark)?.querySelector("title");
    if (title) told.textContent = title.textContent;
  });
}
