import { follow } from "./live";
import { list } from "./list";
import { pictures } from "./png";

if (document.body.dataset.view === "list") list();
else follow(() => "", () => { /* these views are read, not watched: a reload is the reader's to make */ });
pictures();
