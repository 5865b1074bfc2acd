"use strict";
// Labels without leaving the page, and keys. Without this script the forms work
// all the same.
const cards = [...document.querySelectorAll(".card[data-id]")];
const undo = document.getElementById("undo");
const line = document.getElementById("said");
let current = -1, hush;

function say(text) {
  line.textContent = text;
  line.hidden = !text;
  clearTimeout(hush);
  hush = setTimeout(() => { line.hidden = true; }, 6000);
}

function go(i, scroll) {
  if (i < 0 || i >= cards.length) return;
  if (current >= 0) cards[current].classList.remove("current");
  current = i;
  cards[i].classList.add("current");
  if (scroll) {
    cards[i].focus({preventScroll: true});
    cards[i].scrollIntoView({block: "nearest"});
  }
}

async function post(form, submitter) {
  const card = form.closest(".card");
  if (card && card.classList.contains("busy")) return;
  if (card) card.classList.add("busy");
  try {
    const answer = await fetch(form.action, {method: "POST", body: new URLSearchParams(new FormData(form, submitter)), headers: {"X-Vet": "1"}});
    const text = await answer.text();
    if (!answer.ok) throw new Error(text.trim());
    const id = decodeURIComponent(answer.headers.get("X-Vet-Candidate"));
    const verdict = answer.headers.get("X-Vet-Verdict");
    const last = decodeURIComponent(answer.headers.get("X-Vet-Undo"));
    undo.hidden = !last;
    undo.querySelector(".last").textContent = last;
    const i = cards.findIndex(c => c.dataset.id === id);
    if (i < 0) {
      say("Undone for " + id + ", which is not on this page.");
      return;
    }
    cards[i].querySelector(".said").innerHTML = text;
    for (const b of cards[i].querySelectorAll(".choose button")) b.setAttribute("aria-pressed", String(b.value === verdict));
    cards[i].querySelector(".back").hidden = !verdict;
    if (form === undo) {
      go(i, true);
      say("Undone.");
    } else if (submitter && submitter.value !== "none") {
      if (i + 1 < cards.length) go(i + 1, true);
      else say("This was the last one on this page.");
    }
  } catch (e) {
    say("Not stored: " + (e.message || "the server does not answer"));
  } finally {
    if (card) card.classList.remove("busy");
  }
}

document.addEventListener("submit", e => {
  if (e.target !== undo && !e.target.matches(".verdict")) return;
  e.preventDefault();
  post(e.target, e.submitter);
});

cards.forEach((c, i) => c.addEventListener("focusin", () => go(i, false)));

document.addEventListener("keydown", e => {
  if (e.ctrlKey || e.metaKey || e.altKey) return;
  if (e.target.matches("input, select, textarea")) {
    // The form's first button is a disabled one, so return gives no verdict.
    if (e.key === "Escape" || e.key === "Enter" && e.target.closest(".verdict")) e.target.blur();
    return;
  }
  const card = cards[current];
  const press = value => { if (card) card.querySelector(`.choose button[value=${value}]`).click(); };
  switch (e.key) {
  case "r": press("real"); break;
  case "b": press("bogus"); break;
  case "u": press("unsure"); break;
  case "c": if (card) card.querySelector("input[name=comment]").focus(); break;
  case "z": if (undo && !undo.hidden) post(undo); break;
  case "j": go(current + 1, true); break;
  case "k": go(current - 1, true); break;
  case "n": { const next = document.querySelector("a[rel=next]"); if (next) next.click(); break; }
  case "o": if (card) card.querySelector("h2 a").click(); break;
  default: return;
  }
  e.preventDefault();
});

go(0, false);
