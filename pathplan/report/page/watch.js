// The live page: asks for what is new, puts it in place, keeps view, slider and scroll.

let seen = Number(document.documentElement.dataset.version);
const line = document.getElementById("trouble");
const doing = document.getElementById("doing");

function tell(text, stale) {
  line.textContent = text;
  line.hidden = !text;
  document.body.classList.toggle("stale", stale);
}

function place(sections) {
  const main = document.getElementById("sections");
  const focused = document.activeElement && document.activeElement.id;
  for (const [name, markup] of Object.entries(sections)) {
    const slot = document.querySelector(`[data-slot="${name}"]`);
    if (slot && slot.dataset.digest !== markup.digest) {
      slot.innerHTML = markup.html;
      slot.dataset.digest = markup.digest;
    }
  }
  main.hidden = false;
  if (focused) document.getElementById(focused)?.focus({ preventScroll: true });
}

async function follow() {
  for (;;) {
    let answer;
    try {
      const reply = await fetch(`/state?seen=${seen}`, { cache: "no-store" });
      if (reply.status === 204) continue;
      if (!reply.ok) throw new Error(reply.statusText);
      answer = await reply.json();
    } catch {
      tell("The watch has ended: this is its last plan.", true);
      doing.hidden = true;
      await new Promise((done) => setTimeout(done, 1000));
      continue;
    }
    if (answer.sections) {
      document.title = answer.title;
      place(answer.sections);
      await show(answer.data);
    }
    seen = answer.version;
    tell(answer.trouble, answer.trouble !== "");
    doing.hidden = !answer.doing;
    document.documentElement.dataset.version = seen;
  }
}
follow();
