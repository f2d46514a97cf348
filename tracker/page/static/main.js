// Which view is shown, by the part of the address behind the #: none for the start, a recording, a droplet in it.

import { complain, el, notice, sentence } from "./dom.js";
import { get } from "./api.js";
import { InspectView } from "./inspect.js";
import { lettersOn, showKeys } from "./keys.js";
import { ShelfView } from "./shelf.js";

const main = document.getElementById("view"), tools = document.getElementById("tools"), trail = document.getElementById("trail");
let view = null, shelf = null, shownId = null;

async function route() {
  const [id, droplet] = location.hash.replace(/^#\/?/, "").split("/");
  const wanted = droplet !== undefined && /^\d+$/.test(droplet) ? Number(droplet) : undefined;
  if (id && id === shownId && view instanceof InspectView) {
    if (wanted !== undefined && wanted !== view.chosen && view.result) view.choose(wanted);
    return;
  }
  view?.close();
  document.getElementById("notices").replaceChildren();
  shownId = id || "";
  try {
    shelf = await get("/api/shelf");
    const links = { tools, trail, shelf, wantDroplet: wanted, update: (fresh) => { shelf = fresh; } };
    view = id ? new InspectView(main, id, links) : new ShelfView(main, shelf, links);
    await view.open();
    document.title = id ? `${view.result?.name ?? "recording"} \u2013 fallrise` : "fallrise";
  } catch (error) {
    main.replaceChildren(el("div", { class: "plain" }, el("h1", {}, "This cannot be shown"), el("p", {}, sentence(error.message)), el("p", {}, el("a", { href: "#/" }, "All recordings"))));
    if (!error.status && error.status !== 0) throw error;
  }
}

const typing = (target) => target instanceof HTMLElement && (target.matches("input:not([type=range]):not([type=checkbox]), textarea, select") || target.isContentEditable);

document.addEventListener("keydown", (event) => {
  if (event.defaultPrevented || event.ctrlKey || event.metaKey || document.querySelector("dialog[open]") || typing(event.target)) return;
  const single = event.key.length === 1 && event.key !== " ";
  if (single && !lettersOn) return;
  if (event.target instanceof HTMLElement) {
    // Controls keep the keys that they have of their own.
    if (event.target.matches("button, a, [role=tab], summary") && (event.key === " " || event.key === "Enter")) return;
    if (event.target.matches("input[type=range]") && !single) return;
    if (event.target.matches("[role=tabpanel], .table-wrap, main") && ["ArrowUp", "ArrowDown", "PageUp", "PageDown"].includes(event.key) && event.target.scrollHeight > event.target.clientHeight) return;
  }
  if (event.key === "?") { showKeys(); event.preventDefault(); return; }
  if (event.key.toLowerCase() === "r" && document.getElementById("reason")) { document.getElementById("reason").focus(); event.preventDefault(); return; }
  if (view?.key(event)) event.preventDefault();
});

document.getElementById("keys").addEventListener("click", showKeys);
document.getElementById("skip").addEventListener("click", (event) => { event.preventDefault(); main.focus(); });
window.addEventListener("hashchange", () => route().catch(complain));
window.addEventListener("unhandledrejection", (event) => notice(String(event.reason?.message || event.reason), { bad: true }));
// For tests and for whoever looks closer from the browser's console; nothing here changes a result.
window.fallrise = { get view() { return view; } };
route();
