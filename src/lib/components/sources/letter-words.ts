// Pure.
interface Words {
	/** What is wrong with the reading. */
	what: string;
	/** What must change before sending it again helps. */
	then: string;
}

const WORDS: Readonly<Record<string, Words>> = {
	'older-than-retention': {
		what: 'Older than raw readings are kept',
		then: 'Send again after an administrator has made the retention longer.',
	},
	'not-a-number': { what: 'The value is not a number', then: 'Nothing stores it; look at scale and data type of the tag.' },
	'time-out-of-range': { what: 'The time is none that can be stored', then: 'Look at the clock of the source.' },
	'null-character': {
		what: 'The payload held a null character',
		then: 'Sent again it is stored with the character written out.',
	},
	'tag-id-out-of-range': { what: 'No tag has this number', then: 'Nothing stores it.' },
	'tag-unknown': { what: 'The tag is not of this site', then: 'Nothing stores it.' },
	unreadable: { what: 'The letter cannot be read', then: 'It was written by another version.' },
};

/** Plain words for the reason of a dead letter. */
export function letterWords(reason: string): Words {
	return (
		WORDS[reason] ?? {
			what: reason.startsWith('refused-by-store') ? 'The database refused it' : reason,
			then: `Tell the administrator: ${reason}.`,
		}
	);
}
