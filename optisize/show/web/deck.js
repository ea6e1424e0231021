// The SPICE decks: unpacked once, shown, copied, saved.

let decks = null;
let shownDeck = ""; // what is in the page, to leave it alone while sliders move

async function unpack() {
  if (typeof DecompressionStream === "undefined") return null;
  const bytes = Uint8Array.from(atob(record.decks), (letter) => letter.charCodeAt(0));
  const stream = new Blob([bytes]).stream().pipeThrough(new DecompressionStream("gzip"));
  return JSON.parse(await new Response(stream).text());
}

// The row whose deck is shown.
const deckRow = () => choice[byId("deck-of").value] ?? choice.a ?? choice.b;

function refreshDeck() {
  byId("deck-of").options[1].disabled = choice.b === null;
  if (choice[byId("deck-of").value] === null) byId("deck-of").value = choice.a === null ? "b" : "a";
  const row = deckRow();
  const now = `${row} ${decks !== null}`;
  if (now === shownDeck) return;
  shownDeck = now;
  const command = row === null ? "" : `${record.deck_command} ${record.designs[row]}`;
  const missing = `This browser cannot unpack the decks; this writes the one of the design:\n${command}\n`;
  byId("deck").value = row === null ? "" : decks === null ? missing : decks[row];
  byId("copied").textContent = "";
  if (row === null || decks === null) return;
  byId("save").download = `design-${record.designs[row]}.sp`;
  if (byId("save").href.startsWith("blob:")) URL.revokeObjectURL(byId("save").href);
  byId("save").href = URL.createObjectURL(new Blob([decks[row]], {type: "text/plain"}));
}

// Copy by what the browser allows on a page of a file share; where it allows nothing, the text is selected to be
// copied by hand.
async function copyDeck() {
  const area = byId("deck");
  try {
    await navigator.clipboard.writeText(area.value);
    byId("copied").textContent = "Copied";
    return;
  } catch {
    // no secure context, or no permission
  }
  area.focus();
  area.select();
  const done = document.execCommand("copy");
  byId("copied").textContent = done ? "Copied" : "Selected: copy it with Ctrl+C";
}

async function startDecks() {
  byId("copy").addEventListener("click", copyDeck);
  byId("deck-of").addEventListener("change", refreshDeck);
  try {
    decks = await unpack();
  } catch {
    decks = null;
  }
  refreshDeck();
}
