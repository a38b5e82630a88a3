// Takes the data that came with the page and brings it to life.

const view = new View(document.getElementById("view"), document.getElementById("labels"));
const scrub = new Scrub(view);

async function show(doc) {
  const rows = await Rows.of(doc);
  view.load(doc.scene);
  scrub.load(rows);
  document.documentElement.classList.add("live");
}

const carried = document.getElementById("data").textContent;
if (typeof DecompressionStream === "undefined") {
  document.getElementById("no-scrub").hidden = false;
} else if (carried.trim() !== "null") {
  show(JSON.parse(carried));
}
