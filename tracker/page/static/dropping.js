// What a drop brings: files, and folders with the files that lie right in them; a folder of pictures goes up in one piece.

export const PICTURE = /\.(png|tiff?|jpe?g)$/i;

// The browser forgets a drop as soon as its event ends: all entries are asked for before anything is waited for.
export async function dropped(transfer) {
  const items = [...transfer.items].filter((item) => item.kind === "file");
  const held = items.map((item) => ({ entry: item.webkitGetAsEntry?.() || null, file: item.getAsFile() }));
  const files = held.filter(({ entry, file }) => file && !entry?.isDirectory).map(({ file }) => file);
  const folders = await Promise.all(held.filter(({ entry }) => entry?.isDirectory).map(async ({ entry }) => ({ name: entry.name, inside: await filesIn(entry) })));
  if (items.length && !items[0].webkitGetAsEntry) await refuseFolders(files);
  return { files, folders };
}

async function filesIn(folder) {
  const reader = folder.createReader(), entries = [];
  for (;;) {   // a reader gives a hundred at a time
    const some = await new Promise((resolve, reject) => { reader.readEntries(resolve, reject); });
    if (!some.length) break;
    entries.push(...some);
  }
  return Promise.all(entries.filter((entry) => entry.isFile).map((entry) => new Promise((resolve, reject) => { entry.file(resolve, reject); })));
}

// Browsers that do not tell a folder from a file give one that cannot be read.
async function refuseFolders(files) {
  for (const file of files) {
    try { await file.slice(0, 1).arrayBuffer(); } catch { throw new Error(`this browser cannot read the folder ${file.name}: use \u201cChoose a folder\u201d, or measure it with \u201cfallrise measure FOLDER\u201d`); }
  }
}

// One body for all pictures: a line that lists names and sizes, then the bytes. Nothing is copied in the browser.
export function packed(name, pictures) {
  const order = new Intl.Collator("en", { numeric: true });
  const sorted = [...pictures].sort((a, b) => order.compare(a.name, b.name));
  return new File([`${JSON.stringify(sorted.map((file) => [file.name, file.size]))}\n`, ...sorted], name);
}
